import { checkLength } from '../shape-error.ts'
import type { Chain } from './chain.ts'
import { placeLinks, requireState, torquesOfMotion } from './inverse-dynamics.ts'

/**
 * The joint-space mass matrix M(q), with the payload that is attached.
 *
 * @param q    position, length n
 * @param out  out, n × n, row-major, overwritten; symmetric to the bit, positive definite when every joint moves mass
 * @throws {ShapeError} a length is wrong
 * Source: a column is the torque of unit acceleration of one joint, at rest, without gravity (Walker & Orin 1982, method 1).
 */
export function massMatrix(chain: Chain, q: Float64Array, out: Float64Array): void {
  checkLength('q', q.length, chain.size, 'one per joint')
  checkLength('out', out.length, chain.size * chain.size, 'joints × joints')
  placeLinks(chain, q)
  fillMassMatrix(chain, out)
}

/**
 * Acceleration that torques cause, for a simulator.
 *
 * @param q        position, length n; qd: velocity
 * @param tau      torque on the joints, friction already taken off, length n
 * @param qdd      out, length n; overwritten
 * @param damping  optional, length n, ≥ 0: added to the mass matrix's diagonal. With h·∂friction/∂q̇ there, a step of length h
 *                 is linearly implicit in friction and stays stable where Coulomb friction is steep
 * @throws {ShapeError} a length is wrong
 * @throws {RangeError} the mass matrix is not positive definite: a joint moves no mass
 * Source: M q̈ = τ − τ(q, q̇, 0), solved by Cholesky factors.
 */
export function forwardDynamics(
  chain: Chain,
  q: Float64Array,
  qd: Float64Array,
  tau: Float64Array,
  qdd: Float64Array,
  damping?: Float64Array,
): void {
  requireState(chain, q, qd, tau)
  checkLength('qdd', qdd.length, chain.size, 'one per joint')
  if (damping !== undefined) checkLength('damping', damping.length, chain.size, 'one per joint')
  const { size, gravity } = chain
  const { matrix, bias, zeros } = chain.work
  placeLinks(chain, q)
  torquesOfMotion(chain, qd, zeros, gravity, bias)
  fillMassMatrix(chain, matrix)
  if (damping !== undefined) for (let i = 0; i < size; i++) matrix[size * i + i] = matrix[size * i + i] + damping[i]
  for (let i = 0; i < size; i++) qdd[i] = tau[i] - bias[i]
  solvePositiveDefinite(matrix, size, qdd)
}

function fillMassMatrix(chain: Chain, out: Float64Array): void {
  const { size } = chain
  const { unit, zeros, weightless, column } = chain.work
  for (let j = 0; j < size; j++) {
    unit[j] = 1
    torquesOfMotion(chain, zeros, unit, weightless, column)
    unit[j] = 0
    for (let i = j; i < size; i++) {
      out[size * i + j] = column[i]
      out[size * j + i] = column[i]
    }
  }
}

/**
 * Solves A x = b for a symmetric positive definite A by Cholesky factors.
 *
 * @param a     n × n, row-major; its lower triangle is overwritten with the factor
 * @param size  n
 * @param b     in: b, out: x, length n
 * @throws {RangeError} a pivot is not positive
 */
export function solvePositiveDefinite(a: Float64Array, size: number, b: Float64Array): void {
  for (let j = 0; j < size; j++) {
    let pivot = a[size * j + j]
    for (let k = 0; k < j; k++) pivot -= a[size * j + k] * a[size * j + k]
    if (!(pivot > 0))
      throw new RangeError(`mass matrix: not positive definite at joint ${j} (pivot ${pivot}); does it move any mass?`)
    const diagonal = Math.sqrt(pivot)
    a[size * j + j] = diagonal
    for (let i = j + 1; i < size; i++) {
      let sum = a[size * i + j]
      for (let k = 0; k < j; k++) sum -= a[size * i + k] * a[size * j + k]
      a[size * i + j] = sum / diagonal
    }
  }
  for (let i = 0; i < size; i++) {
    let sum = b[i]
    for (let k = 0; k < i; k++) sum -= a[size * i + k] * b[k]
    b[i] = sum / a[size * i + i]
  }
  for (let i = size - 1; i >= 0; i--) {
    let sum = b[i]
    for (let k = i + 1; k < size; k++) sum -= a[size * k + i] * b[k]
    b[i] = sum / a[size * i + i]
  }
}

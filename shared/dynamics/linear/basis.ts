import type { IdentifiedBase } from '../identification/index.ts'
import { createNetworkPass, forward, parameterCount } from '../network.ts'
import type { NetworkShape } from '../network.ts'
import { createChain, frictionTorque, PAYLOAD_PARAMETERS, payloadRegressor } from '../rigid-body/index.ts'
import type { ChainDescription, JointFriction } from '../rigid-body/index.ts'
import { checkLength, ShapeError } from '../shape-error.ts'
import type { Normalisation } from '../version.ts'

/**
 * The basis A(x) of a linear scheme: ŷ(t + h) = base(x) + A(x) z + ρ^h b, everything in base standard deviations.
 * Holds work arrays: not to be shared between two evaluations that run at the same time.
 */
export interface Basis {
  /** p, the length of z. */
  readonly size: number
  /** n. */
  readonly joints: number
  /**
   * Evaluates A for rows. Bit-deterministic.
   *
   * @param states  rows × 3n: [position, velocity, acceleration], SI units
   * @param out  out, rows × n × p, row-major, overwritten
   */
  evaluate(states: Float64Array, rows: number, out: Float64Array): void
}

/** What a version or a loss version says of its basis; the context network's parameters are a section of their own. */
export type BasisDescription =
  | { readonly kind: 'payload'; readonly frictionScale: boolean }
  | { readonly kind: 'context'; readonly size: number; readonly network: NetworkShape }

/** What z is multiplied by, so that its values are near 1: z = mass / 2 kg, first moment / 0.2 kg·m, friction scale / 0.2. */
export const PAYLOAD_SCALES = [2, 0.2, 0.2, 0.2, 0.2] as const

/** Everything a payload basis is made of. */
export interface PayloadBasisInputs {
  /** The arm's kinematics, gravity and flange; inertial parameters play no part. */
  readonly chain: ChainDescription
  /** Base standard deviations of torque, length n. */
  readonly outputStd: readonly number[]
  /** The base's friction, whose scale is a fifth state; null: no such state. */
  readonly friction: readonly JointFriction[] | null
}

/**
 * The regressor of a payload at the flange: torque per unit of m, m·cx, m·cy, m·cz, and, when friction is given, the
 * friction torque itself. z is in units of {@link PAYLOAD_SCALES}.
 *
 * @throws {ShapeError} a length is not n
 * Source: Atkeson, An, Hollerbach, Estimation of Inertial Parameters of Manipulator Loads and Links (1986).
 */
export function createPayloadBasis({ chain: description, outputStd, friction }: PayloadBasisInputs): Basis {
  const chain = createChain(description)
  const joints = chain.size
  checkLength('outputStd', outputStd.length, joints, `${joints} joints`)
  if (friction) checkLength('friction', friction.length, joints, `${joints} joints`)
  const size = PAYLOAD_PARAMETERS + (friction ? 1 : 0)
  const q = new Float64Array(joints)
  const qd = new Float64Array(joints)
  const qdd = new Float64Array(joints)
  const regressor = new Float64Array(joints * PAYLOAD_PARAMETERS)
  const rub = new Float64Array(joints)

  function evaluate(states: Float64Array, rows: number, out: Float64Array): void {
    for (let row = 0; row < rows; row++) {
      const at = 3 * joints * row
      for (let j = 0; j < joints; j++) {
        q[j] = states[at + j]
        qd[j] = states[at + joints + j]
        qdd[j] = states[at + 2 * joints + j]
      }
      payloadRegressor(chain, q, qd, qdd, regressor)
      if (friction) frictionTorque(friction, qd, rub)
      for (let j = 0; j < joints; j++) {
        const to = (joints * row + j) * size
        for (let c = 0; c < PAYLOAD_PARAMETERS; c++) {
          out[to + c] = (PAYLOAD_SCALES[c] * regressor[PAYLOAD_PARAMETERS * j + c]) / outputStd[j]
        }
        if (friction) out[to + PAYLOAD_PARAMETERS] = (PAYLOAD_SCALES[PAYLOAD_PARAMETERS] * rub[j]) / outputStd[j]
      }
    }
  }

  return { size, joints, evaluate }
}

/** A learned basis: a network of the normalised state whose n · p outputs are A(x), row by row. */
export interface ContextBasisInputs {
  readonly size: number
  readonly network: NetworkShape
  /** Canonical order. */
  readonly parameters: ArrayLike<number>
  readonly normalisation: Normalisation
}

/**
 * A learned basis, evaluated in double precision: with relu from + − × alone.
 *
 * @throws {ShapeError} the network does not take 3n inputs or does not give n · size outputs, or is not relu
 */
export function createContextBasis({ size, network, parameters, normalisation }: ContextBasisInputs): Basis {
  const { inputMean, inputStd, outputMean } = normalisation
  const joints = outputMean.length
  const inputs = 3 * joints
  if (network.sizes[0] !== inputs || network.sizes.at(-1) !== joints * size || network.activation !== 'relu') {
    throw new ShapeError(
      `A basis of ${size} on ${joints} joints is a relu network of ${inputs} inputs and ${joints * size} outputs; `
      + `found ${network.activation}, [${network.sizes}].`,
    )
  }
  checkLength('parameters', parameters.length, parameterCount(network), `sizes ${network.sizes.join('-')}`)
  const theta = Float64Array.from(parameters)
  const pass = createNetworkPass(network, rowsAtATime)
  const x = new Float64Array(rowsAtATime * inputs)

  function evaluate(states: Float64Array, rows: number, out: Float64Array): void {
    for (let from = 0; from < rows; from += rowsAtATime) {
      const count = Math.min(rowsAtATime, rows - from)
      for (let k = 0, at = from * inputs; k < count * inputs; k++, at++) {
        x[k] = (states[at] - inputMean[k % inputs]) / inputStd[k % inputs]
      }
      forward(pass, theta, x, count, from === 0 && count === rows ? out : out.subarray(from * joints * size))
    }
  }

  return { size, joints, evaluate }
}

const rowsAtATime = 64

/** The payload basis of an identified base. */
export function payloadBasisOf(base: IdentifiedBase, outputStd: readonly number[], frictionScale: boolean): Basis {
  return createPayloadBasis({ chain: base.chain, outputStd, friction: frictionScale ? base.friction : null })
}

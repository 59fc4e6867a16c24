import { symmetricEigen } from './symmetric.ts'

/**
 * The pseudo-inertia of a link in units of length ℓ: ((Σ/ℓ², m·c/ℓ), (m·cᵀ/ℓ, m)) with Σ = ½ tr(I) 1 − I, I about the
 * link's origin. A body with mass everywhere ≥ 0 can have these parameters exactly when this matrix is positive definite:
 * positive mass, positive definite inertia about the centre of mass, and the triangle inequality, all in one.
 *
 * @param parameters  ten from `at` on: m, m·c (3), inertia about the origin (xx, xy, xz, yy, yz, zz)
 * @param out  out, 4 × 4
 * Source: Wensing, Kim, Slotine, Linear matrix inequalities for physically consistent inertial parameter identification (2018;
 * from memory).
 */
export function pseudoInertia(parameters: Float64Array, at: number, length: number, out: Float64Array): void {
  const [m, x, y, z, xx, xy, xz, yy, yz, zz] = parameters.subarray(at, at + 10)
  const s = 1 / (length * length)
  out[0] = 0.5 * (yy + zz - xx) * s
  out[5] = 0.5 * (xx + zz - yy) * s
  out[10] = 0.5 * (xx + yy - zz) * s
  out[1] = out[4] = -xy * s
  out[2] = out[8] = -xz * s
  out[6] = out[9] = -yz * s
  out[3] = out[12] = x / length
  out[7] = out[13] = y / length
  out[11] = out[14] = z / length
  out[15] = m
}

/** The inverse of {@link pseudoInertia}: writes the ten parameters. */
export function fromPseudoInertia(matrix: Float64Array, length: number, out: Float64Array, at: number): void {
  const square = length * length
  out[at] = matrix[15]
  out[at + 1] = matrix[3] * length
  out[at + 2] = matrix[7] * length
  out[at + 3] = matrix[11] * length
  out[at + 4] = (matrix[5] + matrix[10]) * square
  out[at + 5] = -matrix[1] * square
  out[at + 6] = -matrix[2] * square
  out[at + 7] = (matrix[0] + matrix[10]) * square
  out[at + 8] = -matrix[6] * square
  out[at + 9] = (matrix[0] + matrix[5]) * square
}

const work = { matrix: new Float64Array(16), vectors: new Float64Array(16) }

/** Least eigenvalue of a link's pseudo-inertia; consistent when above zero. */
export function leastEigenvalue(parameters: Float64Array, at: number, length: number): number {
  pseudoInertia(parameters, at, length, work.matrix)
  symmetricEigen(work.matrix, 4, work.vectors)
  return Math.min(work.matrix[0], work.matrix[5], work.matrix[10], work.matrix[15])
}

/**
 * The nearest parameters whose pseudo-inertia has no eigenvalue below `least`, nearest in the Frobenius norm.
 *
 * @param out  ten parameters from `at` on; may be the input
 */
export function nearestConsistent(parameters: Float64Array, at: number, length: number, least: number, out: Float64Array): void {
  const { matrix, vectors } = work
  pseudoInertia(parameters, at, length, matrix)
  symmetricEigen(matrix, 4, vectors)
  const values = [matrix[0], matrix[5], matrix[10], matrix[15]].map(value => Math.max(value, least))
  for (let r = 0; r < 4; r++) {
    for (let c = 0; c < 4; c++) {
      let sum = 0
      for (let k = 0; k < 4; k++) sum += values[k] * vectors[4 * r + k] * vectors[4 * c + k]
      matrix[4 * r + c] = sum
    }
  }
  fromPseudoInertia(matrix, length, out, at)
}

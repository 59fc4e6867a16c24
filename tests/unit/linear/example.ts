import { createRandom } from '../../../shared/dynamics/random.ts'
import type { LinearMotion } from '../../../shared/dynamics/linear/linear-motion.ts'
import type { FilterConstants } from '../../../shared/dynamics/linear/recursive.ts'

/** Sizes of the example: 3 states, 2 joints. */
export const size = 3
export const joints = 2
export const noise = 0.1

export const constants: FilterConstants = {
  rowsPerStep: 4, decay: 0.5, initialFactor: [1, 0.2, 0.7, -0.1, 0.3, 1.2], initialBias: [0.2, 0.3],
  driftOfState: [1e-3, 2e-3, 3e-3], driftOfBias: [0.1, 0.2], noise: [noise ** 2, noise ** 2], threshold: 4, opening: [1, 1, 1],
}

/** A motion that is exactly linear: residual = basis · z + noise, z per row as given. */
export function motionOf(
  rows: number, seed: number, zAt: (row: number) => readonly number[], changes: number[] | null = [],
): LinearMotion {
  const random = createRandom(seed)
  const basis = Float64Array.from({ length: rows * joints * size }, () => random.normal())
  const residual = Float64Array.from({ length: rows * joints }, (_, k) => {
    const z = zAt(Math.floor(k / joints))
    let sum = noise * random.normal()
    for (let c = 0; c < size; c++) sum += basis[k * size + c] * z[c]
    return sum
  })
  return {
    name: `motion ${seed}`, rows, time: Float64Array.from({ length: rows }, (_, row) => 0.02 * row),
    x: Float64Array.from({ length: rows * 3 * joints }, () => random.normal()), residual, basis,
    unloaded: zAt(0).every(value => value === 0) && changes?.length === 0, changes,
  }
}

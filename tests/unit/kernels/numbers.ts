import { createRandom } from '../../../shared/dynamics/random.ts'

/** `count` values uniform in ±1, the same for the same seed. */
export function numbers(seed: number, count: number): Float64Array {
  const random = createRandom(seed)
  return Float64Array.from({ length: count }, () => 2 * random.uniform() - 1)
}

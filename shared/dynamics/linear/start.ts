import { factorise } from '../identification/symmetric.ts'
import { fitConstant } from './least-squares.ts'
import type { LinearMotion } from './linear-motion.ts'
import type { FilterConstants } from './recursive.ts'

/** Least standard deviation of a z before anything is measured: what training never varied may still vary in service. */
const leastSpread = 0.3

/**
 * Constants of the recursive update before meta-training, from what constant states say of the training motions: their
 * second moments are the initial covariance, what they leave over is the noise.
 *
 * @param training  at least one motion, prepared with the basis; those with known changes count by their longest stretch
 */
export function startConstants(training: readonly LinearMotion[], rowsPerStep: number): FilterConstants {
  const { residual, rows, basis } = training[0]
  const joints = residual.length / rows
  const size = basis.length / residual.length
  const steady = training.filter(({ changes }) => changes !== null && changes.length === 0)
  const used = steady.length > 0 ? steady : training
  const second = new Float64Array(size * size)
  const noise = new Float64Array(joints)
  for (const motion of used) {
    const { z, perJoint } = fitConstant(motion)
    for (let r = 0; r < size; r++) for (let c = 0; c < size; c++) second[r * size + c] += (z[r] * z[c]) / used.length
    for (let j = 0; j < joints; j++) noise[j] += perJoint[j] / used.length
  }
  for (let r = 0; r < size; r++) second[r * size + r] = 1.05 * second[r * size + r] + leastSpread * leastSpread
  const variances = Array.from({ length: size }, (_, r) => second[r * size + r])
  factorise(second, size)
  return {
    rowsPerStep,
    decay: 0.7,
    initialFactor: Array.from({ length: size }, (_, r) => Array.from(second.subarray(r * size, r * size + r + 1))).flat(),
    initialBias: Array.from(noise),
    driftOfState: variances.map(variance => 1e-4 * variance),
    driftOfBias: Array.from(noise, value => 0.5 * value),
    noise: Array.from(noise),
    threshold: 4,
    opening: variances.map(() => 0.5),
  }
}

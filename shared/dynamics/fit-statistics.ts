import { checkLength, ShapeError } from './shape-error.ts'

/** How many reference states a version carries for its guards: enough to cover a workspace, few enough to predict in 20 µs. */
export const REFERENCE_STATES = 32

/** Least noise per joint, base standard deviations: no torque sensor resolves a thousandth of its signal's spread. */
const LEAST_NOISE = 1e-3

/**
 * Noise per joint from what a fit leaves over on motions it did not see: the root of half the mean squared difference of
 * neighbouring residuals. What the model gets wrong changes slowly and cancels in the difference; what remains is noise.
 *
 * @param residuals  one array per recording, rows × n, measured − predicted torque in base standard deviations, in time order
 * @returns length n, each at least 0.001
 * @throws {ShapeError} no recording has two rows
 * Source: von Neumann, Distribution of the ratio of the mean square successive difference to the variance (1941).
 */
export function noiseOfResiduals(residuals: readonly Float64Array[], joints: number): number[] {
  const sums = new Float64Array(joints)
  let differences = 0
  for (const recording of residuals) {
    for (let at = joints; at < recording.length; at += joints, differences++) {
      for (let j = 0; j < joints; j++) {
        const difference = recording[at + j] - recording[at + j - joints]
        sums[j] += difference * difference
      }
    }
  }
  if (differences === 0) throw new ShapeError('No recording has two rows, so its noise cannot be told from its error.')
  return Array.from(sums, sum => Math.max(Math.sqrt(sum / (2 * differences)), LEAST_NOISE))
}

/**
 * Reference states for the guards: rows evenly spaced through the fit's data, in their order.
 *
 * @param data  count × channels, row-major: [position, velocity, acceleration], SI units
 * @returns REFERENCE_STATES rows, or all rows where there are fewer
 * @throws {ShapeError} data is empty or not count × channels
 */
export function pickReferenceStates(data: Float64Array, count: number, channels: number): number[][] {
  if (count < 1) throw new ShapeError('Reference states come from the data of the fit, which has no rows.')
  checkLength('data', data.length, count * channels, `${count} rows of ${channels} channels`)
  const states = Math.min(REFERENCE_STATES, count)
  return Array.from({ length: states }, (_, k) => {
    const row = Math.floor(((k + 0.5) * count) / states)
    return Array.from(data.subarray(row * channels, (row + 1) * channels))
  })
}

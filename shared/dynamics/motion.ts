import { checkLength } from './shape-error.ts'
import type { NetworkShape } from './network.ts'
import type { Normalisation } from './version.ts'

/** A recorded motion of an arm with n joints, in SI units, columns in joint order. */
export interface Motion {
  readonly name: string
  readonly rows: number
  /** s, rising strictly, length rows. */
  readonly time: Float64Array
  /** rows × 3n: [position, velocity, acceleration]. */
  readonly states: Float64Array
  /** rows × n. */
  readonly torque: Float64Array
}

/** A motion as a network sees it: dimensionless, with the base's own predictions. */
export interface NormalisedMotion {
  readonly name: string
  readonly rows: number
  /** s, length rows. */
  readonly time: Float64Array
  /** rows × 3n: network inputs. */
  readonly x: Float64Array
  /** rows × n: measured torque, base standard deviations. */
  readonly measured: Float64Array
}

/**
 * Normalises a motion: (value − mean) / standard deviation, per channel and per joint.
 *
 * @throws {ShapeError} the motion's columns do not fit the normalisation
 */
export function normaliseMotion(motion: Motion, normalisation: Normalisation): NormalisedMotion {
  const { inputMean, inputStd, outputMean, outputStd } = normalisation
  const { name, rows, time, states, torque } = motion
  checkLength(`${name}: time`, time.length, rows, `${rows} rows`)
  checkLength(`${name}: states`, states.length, rows * inputMean.length, `${rows} rows of ${inputMean.length} channels`)
  checkLength(`${name}: torque`, torque.length, rows * outputMean.length, `${rows} rows of ${outputMean.length} joints`)
  return {
    name,
    rows,
    time,
    x: states.map((value, k) => (value - inputMean[k % inputMean.length]) / inputStd[k % inputMean.length]),
    measured: torque.map((value, k) => (value - outputMean[k % outputMean.length]) / outputStd[k % outputMean.length]),
  }
}

// Lower bounds of the normalisation's standard deviations. Slow motion makes acceleration mostly noise; without a floor the
// network learns that noise.
const leastVelocityStd = 0.5
const leastAccelerationStd = 1.5
/** A joint that never moves, or never feels torque, must not divide by zero (rad, N·m). */
const leastStd = 1e-3

/**
 * The normalisation of a set of motions: mean and standard deviation per channel and joint, floored at 0.5 rad/s for
 * velocity and 1.5 rad/s² for acceleration.
 *
 * @param motions  at least one row in all
 */
export function fitNormalisation(motions: readonly Motion[], joints: number): Normalisation {
  const inputs = momentsOf(motions.map(motion => motion.states), 3 * joints)
  const outputs = momentsOf(motions.map(motion => motion.torque), joints)
  const floors = [leastStd, leastVelocityStd, leastAccelerationStd]
  return {
    inputMean: inputs.mean,
    inputStd: inputs.std.map((std, channel) => Math.max(std, floors[Math.floor(channel / joints)])),
    outputMean: outputs.mean,
    outputStd: outputs.std.map(std => Math.max(std, leastStd)),
  }
}

/** Network shape of an arm: 3n inputs, the hidden widths, n outputs. */
export function networkOf(joints: number, hidden: readonly number[], activation: NetworkShape['activation']): NetworkShape {
  return { sizes: [3 * joints, ...hidden, joints], activation }
}

function momentsOf(tables: readonly Float64Array[], columns: number): { mean: number[]; std: number[] } {
  const mean = new Array<number>(columns).fill(0)
  const square = new Array<number>(columns).fill(0)
  let rows = 0
  for (const table of tables) {
    rows += table.length / columns
    for (let k = 0; k < table.length; k++) mean[k % columns] += table[k]
  }
  for (let c = 0; c < columns; c++) mean[c] /= rows
  // Second pass about the mean: the one-pass formula loses digits where the mean is large.
  for (const table of tables) {
    for (let k = 0; k < table.length; k++) square[k % columns] += (table[k] - mean[k % columns]) ** 2
  }
  return { mean, std: square.map(sum => Math.sqrt(sum / rows)) }
}

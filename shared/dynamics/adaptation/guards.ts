import type { AdaptationInputs, Reason, ReasonCode } from './adaptation.ts'
import type { GuardSettings } from './settings.ts'

/** What the guards know of the arm and the version, made ready once. n joints. */
export interface GuardTable {
  readonly settings: GuardSettings
  readonly jointNames: readonly string[]
  readonly units: readonly string[]
  /** N·m per base standard deviation, length n. */
  readonly outputStd: Float64Array
  /** Largest plausible distance of measured from predicted torque, N·m, length n. */
  readonly plausibleError: Float64Array
  /** One over the torque limit, length n: puts joints on one scale. */
  readonly inverseLimit: Float64Array
  /** Largest change and drift of predicted torque, base standard deviations, length n. */
  readonly torqueChange: Float64Array
  readonly drift: Float64Array
  /** Squared noise of the torque, base standard deviations, length n. */
  readonly noiseSquared: Float64Array
  /** Squared noise of a comparison with base, likewise: the larger of the torque's noise and the setting's. */
  readonly floorSquared: Float64Array
}

/** Sums of squared errors over the same rows, base standard deviations, length n: of what was served, and of base. */
export interface Compared {
  readonly served: Float64Array
  readonly base: Float64Array
  readonly rows: number
}

/**
 * The first joint that is worse than base, or −1: its root mean square error more than `tolerance` above base's, and the
 * mean squared errors further apart than noise. Without the second test, a joint on which base is all but perfect would
 * stop the others from learning: a whole network that follows a payload at high gain is never as quiet as base there.
 *
 * @param newest  where given, a joint must be worse in these rows too: what has recovered since is left alone
 */
export function worseJoint({ settings, floorSquared }: GuardTable, { served, base, rows }: Compared, newest?: Compared): number {
  const factor = (1 + settings.tolerance) * (1 + settings.tolerance)
  for (let j = 0; j < served.length; j++) {
    const isWorse = served[j] > factor * base[j] && served[j] - base[j] > rows * floorSquared[j]
    if (isWorse && (!newest || newest.served[j] > factor * newest.base[j])) return j
  }
  return -1
}

/**
 * A measured torque further than this share of the joint's limit from the prediction is a fault of the sensor, of the
 * unit or of the order of joints. Payloads of 4 kg reach 0.25 on a simulated arm; an arm loaded beyond 0.75 has no reserve.
 */
const PLAUSIBLE_ERROR = 0.75

/** Least cosine between measured and predicted torque. Payloads of 4 kg on a simulated arm reach −0.35; a flipped sign, −0.95. */
const LEAST_COSINE = -0.5

/** Torques below this many times their noise say nothing of their sign. */
const TELLING_NOISE = 10

/** The guards' table for an arm and a version. */
export function createGuardTable({ version, settings, limits, jointNames, units }: AdaptationInputs): GuardTable {
  const { normalisation, noise } = version.description
  const outputStd = Float64Array.from(normalisation.outputStd)
  const share = (of: number) => limits.torque.map((limit, j) => (of * limit) / outputStd[j])
  return {
    settings: settings.guard,
    jointNames,
    units,
    outputStd,
    plausibleError: limits.torque.map(limit => PLAUSIBLE_ERROR * limit),
    inverseLimit: limits.torque.map(limit => 1 / limit),
    torqueChange: share(settings.guard.torqueChange),
    drift: share(settings.guard.drift),
    noiseSquared: Float64Array.from(noise, value => value * value),
    floorSquared: Float64Array.from(noise, value => Math.max(value, settings.guard.toleranceFloor) ** 2),
  }
}

/**
 * Whether measured torque can be what it says: within three quarters of each joint's limit of the prediction, and not
 * opposed to it, as it is when a sign convention is wrong. The first reason against it, or null.
 *
 * @param measured  rows × n, N·m
 * @param predicted  rows × n, base standard deviations
 */
export function judgePlausibility(
  table: GuardTable,
  measured: Float64Array,
  predicted: Float64Array,
  rows: number,
  outputMean: Float64Array,
): Reason | null {
  const { plausibleError, inverseLimit, outputStd, noiseSquared } = table
  const joints = outputStd.length
  let product = 0
  let measuredSquared = 0
  let expectedSquared = 0
  let noise = 0
  for (let k = 0, j = 0; k < rows * joints; k++, j = j + 1 === joints ? 0 : j + 1) {
    const torque = predicted[k] * outputStd[j] + outputMean[j]
    const error = measured[k] - torque
    if (error > plausibleError[j] || error < -plausibleError[j]) return reasons.tooFar(table, j, measured[k], torque)
    const given = measured[k] * inverseLimit[j]
    const expected = torque * inverseLimit[j]
    product += given * expected
    measuredSquared += given * given
    expectedSquared += expected * expected
    noise += noiseSquared[j] * outputStd[j] * outputStd[j] * inverseLimit[j] * inverseLimit[j]
  }
  const telling = TELLING_NOISE * TELLING_NOISE * noise
  if (measuredSquared < telling || expectedSquared < telling) return null
  const cosine = product / Math.sqrt(measuredSquared * expectedSquared)
  return cosine < LEAST_COSINE ? reasons.opposed(cosine) : null
}

/** Index into `states` of the joint that exceeds its bound the most on any reference state, or −1. */
export function mostExceeding(now: Float64Array, before: Float64Array, bounds: Float64Array): number {
  let worst = -1
  let most = 1
  for (let k = 0, j = 0; k < now.length; k++, j = j + 1 === bounds.length ? 0 : j + 1) {
    const difference = now[k] - before[k]
    const ratio = (difference < 0 ? -difference : difference) / bounds[j]
    if (ratio > most) {
      most = ratio
      worst = k
    }
  }
  return worst
}

/** A number as a sentence shows it: four significant digits. */
function shown(value: number): string {
  return String(Number(value.toPrecision(4)))
}

function reason(code: ReasonCode, detail: string, joint: number | null, found: number | null, bound: number | null): Reason {
  return { code, detail, joint, found, bound }
}

/** The sentences of all verdicts, one function per code. */
export const reasons = {
  notFinite: (what: string): Reason =>
    reason('not_finite', `${what} is not a finite number, so nothing can be learned from this batch.`, null, null, null),

  tooFar: (table: GuardTable, joint: number, measured: number, predicted: number): Reason => {
    const [name, unit, bound] = [table.jointNames[joint], table.units[joint], table.plausibleError[joint]]
    return reason(
      'implausible',
      `${name}: a measured torque of ${shown(measured)} ${unit} lies further from the predicted ` +
        `${shown(predicted)} ${unit} than ${shown(bound)} ${unit} (75 % of the limit); check sensor, unit and order of joints.`,
      joint,
      Math.abs(measured - predicted),
      bound,
    )
  },

  opposed: (found: number): Reason =>
    reason(
      'implausible',
      `Measured torque runs against what is predicted (cosine ${shown(found)}, least ` +
        `${shown(LEAST_COSINE)}); check the sign convention and the order of joints.`,
      null,
      found,
      LEAST_COSINE,
    ),

  stepNorm: (found: number, bound: number): Reason =>
    reason(
      'step_norm',
      `The step would change the adapted numbers by ${shown(found)}, more than ${shown(bound)}.`,
      null,
      found,
      bound,
    ),

  torqueChange: (table: GuardTable, joint: number, found: number): Reason => {
    const bound = table.torqueChange[joint] * table.outputStd[joint]
    return reason(
      'torque_change',
      `${table.jointNames[joint]}: the step would change the predicted torque by ${shown(found)} ` +
        `${table.units[joint]} on a reference state, more than ${shown(bound)} ${table.units[joint]} ` +
        `(${shown(100 * table.settings.torqueChange)} % of the joint's limit).`,
      joint,
      found,
      bound,
    )
  },

  drift: (table: GuardTable, joint: number, found: number): Reason => {
    const bound = table.drift[joint] * table.outputStd[joint]
    return reason(
      'drift',
      `${table.jointNames[joint]}: the predicted torque would lie ${shown(found)} ${table.units[joint]} from the ` +
        `base version's on a reference state, more than ${shown(bound)} ${table.units[joint]} ` +
        `(${shown(100 * table.settings.drift)} % of the joint's limit).`,
      joint,
      found,
      bound,
    )
  },

  /** found, base: root mean square errors in the joint's unit. */
  worseThanBase: (table: GuardTable, joint: number, found: number, base: number, where: string): Reason => {
    const bound = (1 + table.settings.tolerance) * base
    return reason(
      'worse_than_base',
      `${table.jointNames[joint]}: ${where} the error is ${shown(found)} ${table.units[joint]}, base's ` +
        `${shown(base)} ${table.units[joint]}; more than ${shown(100 * table.settings.tolerance)} % worse is not served.`,
      joint,
      found,
      bound,
    )
  },

  noHelp: (found: number, bound: number): Reason =>
    reason(
      'no_help',
      `On the newest quarter, which it did not see, the step leaves an error of ${shown(found)}, no less than the ` +
        `${shown(bound)} before it.`,
      null,
      found,
      bound,
    ),

  frozen: (why: string): Reason => reason('frozen', `The adaptation is frozen: ${why}`, null, null, null),

  gap: (found: number, bound: number): Reason =>
    reason(
      'gap',
      `The rows pause for ${shown(found)} s, longer than ${shown(bound)} s; steps are not taken across a gap.`,
      null,
      found,
      bound,
    ),

  excitation: (table: GuardTable, joint: number, found: number): Reason =>
    reason(
      'excitation',
      `The arm hardly moved over the last second: the most moved joint, ${table.jointNames[joint]}, reached ` +
        `${shown(found)} of its base standard deviation of velocity, less than ${shown(table.settings.excitation)}.`,
      joint,
      found,
      table.settings.excitation,
    ),

  belowNoise: (found: number): Reason =>
    reason('below_noise', `The error is ${shown(found)} times the noise, which no step can improve.`, null, found, 1),
}

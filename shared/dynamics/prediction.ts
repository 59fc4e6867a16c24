import { fade } from './deterministic.ts'
import type { Kernels, NetworkHandle, NormalisationHandle } from './kernels/kernels.ts'
import type { ArmLimits } from './limits.ts'
import { checkLength, checkRows, ShapeError } from './shape-error.ts'
import { checkVersion } from './version.ts'
import type { Normalisation, Version } from './version.ts'

/** Most rows of one prediction. */
export const MOST_ROWS = 4096

/** States to predict for: matrices row-major, rows × n, SI units; arrays may be longer than the rows used. */
export interface PredictQuery {
  readonly rows: number
  readonly position: Float64Array
  readonly velocity: Float64Array
  readonly acceleration: Float64Array
  /** Seconds per row, rising: bounds the change of torque from row to row. null: no bound on the change. */
  readonly time: Float64Array | null
}

/** A bias that fades: ŷ(as_of + ahead) = network(x) + fade^ahead · values, in base standard deviations. */
export interface FadingBias {
  /** Length n, base standard deviations, as of the newest accepted row. */
  readonly values: Float64Array
  /** Share left after one second, above 0 to 1. */
  readonly fade: number
}

/** Where predictions are written; made once by createPrediction, used again and again. */
export interface Prediction {
  /** rows × n, N·m, clamped. */
  readonly torque: Float64Array
  /** One per row, 0 to 1; below 0.5 counts as outside of what the version was fitted on. */
  readonly coverage: Float64Array
  /** Pairs row, joint, one after the other, of the torques that were clamped; the first 2 × limitedCount numbers hold. */
  readonly limited: Int32Array
  limitedCount: number
}

/** Predicts with one version on one arm: the same numbers in server, SDK and browser. */
export interface Predictor {
  readonly joints: number
  /**
   * Torques, clamped to the arm's limits (first magnitude, then change from row to row where time is given), and coverage.
   *
   * @param into  overwritten; with room for the rows
   * @param bias  what is added before clamping; left out: nothing
   * @param ahead  seconds per row by which the bias has faded, each from 0; null: not at all
   * @throws {ShapeError} a length does not fit, or rows is not 1 to 4096
   * @throws {StateRangeError} a row lies so far out that its torque is no finite number
   */
  predict(query: PredictQuery, into: Prediction, bias?: FadingBias | null, ahead?: Float64Array | null): void
  /** Frees the kernel memory it holds. It must not be used afterwards. */
  release(): void
}

/** A state lies too far outside for a torque to be computed. `row` and `joint` count from 0. */
export class StateRangeError extends RangeError {
  override readonly name = 'StateRangeError'
  constructor(
    readonly row: number,
    readonly joint: number,
    readonly channel: 'position' | 'velocity' | 'acceleration',
    value: number,
  ) {
    super(`${channel}: row ${row}, joint ${joint} is ${value}, too far outside what the version was fitted on for a torque.`)
  }
}

/** Room for a prediction of up to maxRows rows of n joints. */
export function createPrediction(maxRows: number, joints: number): Prediction {
  return {
    torque: new Float64Array(maxRows * joints),
    coverage: new Float64Array(maxRows),
    limited: new Int32Array(2 * maxRows * joints),
    limitedCount: 0,
  }
}

/**
 * A predictor for a version on an arm.
 *
 * @param kernels  of this process or worker
 * @throws {ShapeError} the version's parts do not fit, or the arm has another number of joints
 */
export function createPredictor(kernels: Kernels, version: Version, limits: ArmLimits): Predictor {
  checkVersion(version)
  const network = kernels.loadNetwork(version.description.network, version.parameters)
  const rows = createRowPredictor(kernels, version, limits)
  return {
    joints: version.description.joints,
    predict: (query, into, bias = null, ahead = null) => rows.predict(network, query, into, bias, ahead),
    release() {
      network.free()
      rows.release()
    },
  }
}

/** As Predictor, for any network of the version's shape: an adaptation serves one network after another. */
export interface RowPredictor {
  predict(
    network: NetworkHandle,
    query: PredictQuery,
    into: Prediction,
    bias: FadingBias | null,
    ahead: Float64Array | null,
  ): void
  release(): void
}

/** What is common to all networks of one version on one arm. */
export function createRowPredictor(kernels: Kernels, version: Version, limits: ArmLimits): RowPredictor {
  const { joints, normalisation, coverage: statistics } = version.description
  checkLength('limits.torque', limits.torque.length, joints, `${joints} joints`)
  if (limits.torqueRate) checkLength('limits.torqueRate', limits.torqueRate.length, joints, `${joints} joints`)
  const scales: NormalisationHandle = kernels.loadNormalisation(normalisation)
  const coverage = kernels.loadCoverage(statistics)
  const outputStd = Float64Array.from(normalisation.outputStd)

  return {
    predict(network, query, into, bias, ahead) {
      checkQuery(query, joints, into, ahead)
      kernels.predict(network, scales, query, query.rows, into.torque, { coverage, out: into.coverage })
      if (bias) addBias(bias, outputStd, ahead, query.rows, joints, into.torque)
      // Before clamping, which would hand out an overflow as the joint's full torque.
      if (!allFinite(into.torque, query.rows * joints)) throw outOfRange(query, normalisation, joints)
      clamp(limits, query, joints, into)
    },
    release() {
      scales.free()
      coverage.free()
    },
  }
}

function checkQuery(query: PredictQuery, joints: number, into: Prediction, ahead: Float64Array | null): void {
  const { rows, position, velocity, acceleration, time } = query
  checkRows(rows, MOST_ROWS)
  const values = rows * joints
  checkRoom('position', position.length, values)
  checkRoom('velocity', velocity.length, values)
  checkRoom('acceleration', acceleration.length, values)
  checkRoom('torque', into.torque.length, values)
  checkRoom('coverage', into.coverage.length, rows)
  if (time) checkRoom('time', time.length, rows)
  if (ahead) checkRoom('ahead', ahead.length, rows)
}

function checkRoom(what: string, found: number, needed: number): void {
  if (found < needed) throw new ShapeError(`${what} has ${found} values, needs at least ${needed}.`)
}

function addBias(
  bias: FadingBias,
  outputStd: Float64Array,
  ahead: Float64Array | null,
  rows: number,
  joints: number,
  torque: Float64Array,
): void {
  for (let row = 0, at = 0; row < rows; row++) {
    const left = ahead ? fade(bias.fade, ahead[row]) : 1
    for (let j = 0; j < joints; j++) torque[at++] += left * bias.values[j] * outputStd[j]
  }
}

/** Saturates, then bounds the change from the row before, as clamped; writes down where. */
function clamp({ torque: bounds, torqueRate }: ArmLimits, { rows, time }: PredictQuery, joints: number, into: Prediction): void {
  const { torque, limited } = into
  let count = 0
  for (let row = 0, at = 0; row < rows; row++) {
    const seconds = time && torqueRate && row > 0 ? time[row] - time[row - 1] : Infinity
    for (let j = 0; j < joints; j++, at++) {
      const asked = torque[at]
      let given = asked > bounds[j] ? bounds[j] : asked < -bounds[j] ? -bounds[j] : asked
      if (seconds < Infinity) {
        const before = torque[at - joints]
        const most = torqueRate![j] * seconds
        if (given > before + most) given = before + most
        else if (given < before - most) given = before - most
      }
      if (given !== asked) {
        torque[at] = given
        limited[count++] = row
        limited[count++] = j
      }
    }
  }
  into.limitedCount = count / 2
}

function allFinite(values: Float64Array, count: number): boolean {
  // Torques that come from f32 are too small for their sum to overflow.
  let sum = 0
  for (let k = 0; k < count; k++) sum += values[k]
  return sum - sum === 0
}

/** The input that lies farthest out, in standard deviations. */
function outOfRange(query: PredictQuery, { inputMean, inputStd }: Normalisation, joints: number): StateRangeError {
  let worst = -1
  let found = new StateRangeError(0, 0, 'position', query.position[0])
  for (const [part, channel] of (['position', 'velocity', 'acceleration'] as const).entries()) {
    for (let k = 0; k < query.rows * joints; k++) {
      const c = part * joints + (k % joints)
      const distance = Math.abs((query[channel][k] - inputMean[c]) / inputStd[c])
      if (distance > worst || distance !== distance) {
        worst = distance
        found = new StateRangeError(Math.floor(k / joints), k % joints, channel, query[channel][k])
      }
    }
  }
  return found
}

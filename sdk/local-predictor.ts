import { floatsFromBase64, rateLimitsFromWire, versionFromWire } from '../shared/contract/snapshots.ts'
import { createKernels, createPrediction, createPredictor, ShapeError } from '../shared/dynamics/index.ts'
import type { FadingBias, Kernels, Prediction, PredictQuery, Predictor } from '../shared/dynamics/index.ts'
import type { Schemas } from './wire.ts'

/** States to predict for, all matrices row-major, rows × n, joints in the snapshot's order, SI units. */
export interface LocalStates {
  rows: number
  position: Float64Array
  velocity: Float64Array
  acceleration: Float64Array
  /** Seconds per row, rising; where given, torque-rate limits apply between rows. */
  time?: Float64Array
  /** Seconds after the snapshot's `as_of`, per row; what fades, fades by it. */
  ahead?: Float64Array
}

/**
 * Evaluates a snapshot where the controller runs: the same kernels, the same bits as the service, no network in between.
 * Nothing is allocated by `predict`, so it may run beside a control loop; fetch new snapshots elsewhere and make a new one.
 *
 * @example
 * const { snapshot } = (await heftwise.adaptations.snapshot(id))!
 * const local = new LocalPredictor(snapshot, { mostRows: 1 })
 * const { torque } = local.predict({ rows: 1, position, velocity, acceleration })
 */
export class LocalPredictor {
  /** The order of the columns. */
  readonly jointNames: readonly string[]
  /** N·m or N, per joint. */
  readonly unit: readonly string[]
  /** Of an adaptation's snapshot; undefined for a version's. */
  readonly revision: number | undefined
  /** On the robot's clock, s; after it the arm's fallback applies. null where nothing was learned yet, or for a version's snapshot. */
  readonly validUntil: number | null
  readonly #predictor: Predictor
  readonly #into: Prediction
  readonly #bias: FadingBias | null
  readonly #query: { -readonly [K in keyof PredictQuery]: PredictQuery[K] }

  /**
   * @param snapshot  of a version or an adaptation
   * @param options.mostRows  most rows of one predict, 1 to 4096; memory for them is taken now. Default 1
   * @param options.kernels  shared with other predictors of this thread; own ones otherwise
   * @throws {ShapeError} a part of the snapshot is missing or does not fit the others
   */
  constructor(
    snapshot: Schemas['VersionSnapshot'] | Schemas['AdaptationSnapshot'],
    { mostRows = 1, kernels = createKernels() }: { mostRows?: number; kernels?: Kernels } = {},
  ) {
    const isAdapted = snapshot.format === 'heftwise-adaptation-1'
    const base = isAdapted ? snapshot.base : snapshot
    const state = isAdapted ? snapshot.state : {}
    const version = versionFromWire(base.description, base.parameters)
    const parameters = state.parameters === undefined ? version.parameters : floatsFromBase64('state.parameters', state.parameters)
    const limits = { torque: Float64Array.from(base.torque_limits), torqueRate: rateLimitsFromWire(base.torque_rate_limits) }
    this.jointNames = base.joint_names
    this.unit = base.unit
    this.revision = isAdapted ? snapshot.revision : undefined
    this.validUntil = isAdapted ? snapshot.valid_until : null
    this.#bias = biasOf(state)
    const none = new Float64Array(0)
    this.#query = { rows: 0, position: none, velocity: none, acceleration: none, time: null }
    this.#predictor = createPredictor(kernels, { ...version, parameters }, limits)
    this.#into = createPrediction(mostRows, this.#predictor.joints)
  }

  /**
   * Torques (rows × n, N·m or N), clamped; coverage per row; the clamped places as pairs row, joint.
   * The arrays are the same ones at every call and overwritten by the next.
   *
   * @throws {ShapeError} more rows than mostRows, or an array of the wrong length
   * @throws {StateRangeError} a row lies so far out that its torque is no finite number
   */
  predict(states: LocalStates): Prediction {
    if (states.rows * this.jointNames.length > this.#into.torque.length) {
      const most = this.#into.torque.length / this.jointNames.length
      throw new ShapeError(`rows is ${states.rows}; this predictor was made for at most ${most}. Make it with a larger mostRows.`)
    }
    this.#query.rows = states.rows
    this.#query.position = states.position
    this.#query.velocity = states.velocity
    this.#query.acceleration = states.acceleration
    this.#query.time = states.time ?? null
    this.#predictor.predict(this.#query, this.#into, this.#bias, states.ahead ?? null)
    return this.#into
  }

  /** Frees the memory it holds. It must not be used afterwards. */
  release(): void {
    this.#predictor.release()
  }

}

function biasOf({ bias, fade }: { bias?: number[]; fade?: number }): FadingBias | null {
  return bias === undefined ? null : { values: Float64Array.from(bias), fade: fade ?? 1 }
}

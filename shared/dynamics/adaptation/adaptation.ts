import type { ArmLimits } from '../limits.ts'
import type { LossVersion } from '../loss-version.ts'
import type { Prediction, PredictQuery } from '../prediction.ts'
import type { Version } from '../version.ts'
import type { AdaptationSettings } from './settings.ts'

/** What an adaptation is made of; with the ordered log it decides every bit of what is served. */
export interface AdaptationInputs {
  readonly version: Version
  /** 'mse', or a loss version made for this base version and scheme. */
  readonly loss: LossVersion | 'mse'
  readonly settings: AdaptationSettings
  readonly limits: ArmLimits
  /** Names and units (N·m or N) of the joints, length n, for the sentences of reasons. */
  readonly jointNames: readonly string[]
  readonly units: readonly string[]
}

/** A measured stretch of motion: matrices row-major, rows × n, joints in the arm's order, SI units. Read during prepare only. */
export interface BatchEntry {
  readonly kind: 'batch'
  /** Place in the log of batches and events, from 1. */
  readonly sequence: number
  /** How many entries before this one the sender declares dropped; 0 when none. */
  readonly skipped: number
  readonly rows: number
  /** The robot's clock per row, s; rises strictly, also across batches. */
  readonly time: Float64Array
  readonly position: Float64Array
  readonly velocity: Float64Array
  readonly acceleration: Float64Array
  readonly torque: Float64Array
}

/** Something that happened to the robot. */
export interface EventEntry {
  readonly kind: 'event'
  readonly sequence: number
  readonly skipped: number
  /** The robot's clock, s. */
  readonly time: number
  readonly event: 'gripped' | 'released' | 'tool_changed' | 'restarted'
}

/** What a person or a key asked of the adaptation. Has no sequence: its place is its position in the ordered log. */
export interface CommandEntry {
  readonly kind: 'command'
  readonly command: 'freeze' | 'resume' | 'reset' | 'end'
  readonly reason: string
}

export type LogEntry = BatchEntry | EventEntry | CommandEntry

/** One reason of a verdict: a stable code, a sentence with the numbers, and the numbers. */
export interface Reason {
  readonly code: ReasonCode
  readonly detail: string
  /** Index of the joint, where one joint decided. */
  readonly joint: number | null
  readonly found: number | null
  readonly bound: number | null
}

export type ReasonCode =
  | 'not_finite'
  | 'implausible'
  | 'step_norm'
  | 'torque_change'
  | 'drift'
  | 'no_help'
  | 'worse_than_base'
  | 'frozen'
  | 'gap'
  | 'excitation'
  | 'below_noise'

/** Where an adaptation stands. */
export type AdaptationState =
  | { readonly state: 'adapting' }
  | { readonly state: 'frozen'; readonly cause: FreezeCause; readonly reason: string }
  | { readonly state: 'ended'; readonly reason: string }

/** A command; too many rejections in a row; a change of tool, after which it can only be ended. */
export type FreezeCause = 'command' | 'rejections' | 'context_changed'

/** What a batch led to. */
export interface BatchOutcome {
  readonly kind: 'batch'
  readonly sequence: number
  /** The revision served from now on. */
  readonly revision: number
  readonly verdict: 'accepted' | 'rejected' | 'stored'
  /** Empty when accepted. */
  readonly reasons: readonly Reason[]
  /** Mean squared error of the whole batch before the step, in base standard deviations, averaged over joints. */
  readonly before: number
  /** The candidate's on the same rows; null where no step was computed. */
  readonly after: number | null
  /** Root mean square error per joint, N·m, length n each. */
  readonly jointBefore: Float64Array
  readonly jointAfter: Float64Array | null
  /** Mean loss weight per joint over the batch, length n: ones under mse; under `unstructured`, its gradient beside mse's. */
  readonly weights: Float64Array
  /** Euclidean norm of the change the candidate makes; null where no step was computed. */
  readonly stepNorm: number | null
  /** Set when this batch made the adaptation freeze itself. */
  readonly changedTo: AdaptationState | null
}

/** What an event or a command led to. */
export interface ChangeOutcome {
  readonly kind: 'event' | 'command'
  /** Of an event; null for a command. */
  readonly sequence: number | null
  readonly revision: number
  /** Set when the state changed. */
  readonly changedTo: AdaptationState | null
}

export type Outcome = BatchOutcome | ChangeOutcome

/** Why an entry cannot enter the log at all. The caller answers it as a problem; nothing has changed. */
export type Refusal =
  | { readonly code: 'sequence_gap'; readonly detail: string; readonly expectedSequence: number }
  | { readonly code: 'sequence_repeated'; readonly detail: string; readonly expectedSequence: number }
  | { readonly code: 'time_not_rising'; readonly detail: string; readonly row: number }
  | { readonly code: 'ended' | 'not_frozen' | 'context_changed'; readonly detail: string }

/** What is served, and where the log stands. */
export interface AdaptationStatus {
  readonly revision: number
  /** The sequence the next batch or event must have, when nothing is skipped. */
  readonly nextSequence: number
  readonly state: AdaptationState
  /** Time of the newest accepted row, s on the robot's clock; null before the first and after a reset. */
  readonly asOf: number | null
  /** asOf + horizon; null with it. */
  readonly validUntil: number | null
  /** Rejections since the last proven step. */
  readonly rejectionsInARow: number
}

/** All that local evaluation needs beside the base version's description. Arrays are copies. */
export interface Snapshot {
  readonly revision: number
  readonly asOf: number | null
  readonly validUntil: number | null
  /** Network parameters in canonical order, to be read with the base version's description. */
  readonly parameters: Float32Array
  /** The fading bias at asOf, base standard deviations, length n, and the share left after a second; null in schemes without. */
  readonly bias: { readonly values: Float64Array; readonly fade: number } | null
}

/**
 * One adaptation: a deterministic state machine over an ordered log.
 *
 * Entries are prepared in log order; each prepare computes the outcome and the state after it on top of the newest
 * prepared state, and changes nothing that is served. Once the caller has made the oldest prepared entry durable it
 * calls publish, and the state after that entry is served. When making durable fails, discard drops all prepared states.
 */
export interface Adaptation {
  readonly inputs: AdaptationInputs
  /** What is published, that is durable and served. */
  status(): AdaptationStatus
  /** What will be once everything prepared is published: sequences are checked against this one. */
  tip(): AdaptationStatus
  /** Entries prepared and not yet published. */
  readonly inFlight: number
  /** Whether an entry may enter the log after everything prepared; null when it may. */
  check(entry: LogEntry): Refusal | null
  /**
   * Computes what an entry leads to, without serving it.
   *
   * @throws {RangeError} check refuses the entry: call check first
   * @throws {ShapeError} an array's length is not rows × n, or rows is not 1 to 1024
   */
  prepare(entry: LogEntry): Outcome
  /**
   * Serves the state after the oldest prepared entry.
   *
   * @throws {RangeError} nothing is prepared
   */
  publish(): void
  /** Drops everything prepared and not published. */
  discard(): void
  /**
   * Torques of the published state, into a prediction made by createPrediction.
   *
   * @param ahead  seconds after asOf per row, each from 0: what fades, fades by it; null reads as 0
   * @throws as Predictor.predict
   */
  predict(query: PredictQuery, ahead: Float64Array | null, into: Prediction): void
  /** The published state as bytes; restoreAdaptation continues from them to the same bits. */
  checkpoint(): Uint8Array
  snapshot(): Snapshot
  /** Frees the kernel memory it holds. It must not be used afterwards. */
  release(): void
}

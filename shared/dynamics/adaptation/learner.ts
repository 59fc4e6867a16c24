import type { BatchHandle, Kernels, NetworkHandle } from '../kernels/kernels.ts'
import type { AdaptationInputs } from './adaptation.ts'
import type { Bytes, ByteReader } from './bytes.ts'

/** One batch, made ready for the numeric work; a work area that the next batch overwrites. n joints. */
export interface Rows {
  rows: number
  /** The robot's clock, s. */
  time: Float64Array
  /** rows × 3n: normalised [position, velocity, acceleration]. */
  x: Float32Array
  /** rows × n: measured torque in base standard deviations. */
  measured: Float64Array
  /** The same rows in kernel memory. */
  readonly handle: BatchHandle
}

/**
 * What an adaptation has learned at one moment. Shared by all states that serve it and counted in `uses`; never changed
 * once a state holds it.
 */
export interface Learned {
  readonly network: NetworkHandle
  /** Scheme `bias`: base standard deviations at asOf, length n. */
  readonly bias: Float64Array | null
  /** Predicted torque on the reference states, states × n, base standard deviations. */
  readonly reference: Float64Array
  /** Time of the newest row it was served after, s; NaN before the first. */
  asOf: number
  uses: number
}

/** The numeric work of one scheme: how it predicts, steps, measures steps, and is stored. */
export interface Learner {
  /** What the base version knows; shared, never given back. */
  readonly base: Learned
  /** One to write into: its content is left over from before. */
  take(): Learned
  giveBack(learned: Learned): void
  /** Torque in base standard deviations for rows from..to of the batch, to the same rows of out (rows × n). */
  predict(learned: Learned, batch: Rows, from: number, to: number, out: Float64Array): void
  /** Steps through the batch's first `rows` rows: `into` becomes `from` after them. Fills into.reference. */
  learn(from: Learned, batch: Rows, rows: number, into: Learned): void
  /** Lets time pass without a step, up to `time`. */
  age(learned: Learned, time: number): void
  /** The same state with the update's memory emptied. */
  restart(from: Learned, into: Learned): void
  /** Euclidean norm of the difference; NaN or Infinity where a number is not finite. */
  distance(a: Learned, b: Learned): number
  /** Mean loss weight per joint over the batch, length n. */
  weights(learned: Learned, batch: Rows, out: Float64Array): void
  write(learned: Learned, bytes: Bytes): void
  read(bytes: ByteReader, into: Learned): void
  release(): void
}

/** Makes the learner of one scheme. */
export type LearnerFactory = (kernels: Kernels, inputs: AdaptationInputs) => Learner

import type { Scheme } from '../../shared/dynamics/adaptation/settings.ts'
import type { Positive } from '../../shared/dynamics/losses/index.ts'

/** What a fitting was asked for, defaults filled in. */
export interface FitParameters {
  readonly kind: 'fit'
  readonly model: string
  /** Ids of recordings. */
  readonly recordings: readonly string[]
  /** Those of them that the metrics are computed on. */
  readonly heldOut: readonly string[]
  readonly hidden: readonly number[]
  readonly activation: 'relu' | 'tanh'
  readonly epochs: number
  readonly rowsPerStep: number
  readonly rate: number
  readonly seed: number
}

/** What a meta-training was asked for, defaults filled in. */
export interface MetaTrainParameters {
  readonly kind: 'meta_train'
  readonly loss: string
  /** Base version. */
  readonly version: number
  readonly scheme: Scheme
  readonly recordings: readonly string[]
  /** Recordings that rates are chosen on. */
  readonly validation: readonly string[]
  readonly positive: Positive
  readonly hidden: number
  readonly updates: number
  readonly innerSteps: number
  readonly streams: number
  readonly rowsPerStep: number
  readonly seed: number
}

export type JobParameters = FitParameters | MetaTrainParameters

/** What a job works on, by id: a later rename or release changes nothing. */
export interface JobWork {
  readonly armId: string
  readonly modelId: string
  /** Names and checksums of the recordings learned from, as they were when the job was asked for. */
  readonly recordings: readonly { readonly name: string; readonly checksum: string }[]
  /** Recordings with use validate, for the recommended rate of `mse`; of a fit. */
  readonly validation?: readonly string[]
  /** Of a meta-training; empty otherwise. */
  readonly lossId: string
  readonly baseVersionId: string
}

import type { ProblemSlug } from '../../shared/contract/problems.ts'
import type { LossVersion } from '../../shared/dynamics/loss-version.ts'
import type { Motion } from '../../shared/dynamics/motion.ts'
import type { Version as VersionArtefact } from '../../shared/dynamics/version.ts'
import type { StoredComparison } from '../models/loss-version.ts'
import type { StoredMetrics, Version } from '../models/version.ts'
import type { LearnedLossKind } from '../../shared/dynamics/loss-version.ts'
import type { FitParameters, MetaTrainParameters } from './job-kinds.ts'

/** A joint as a job needs it. */
export interface JobJoint {
  readonly name: string
  readonly unit: 'N·m' | 'N'
}

/** Everything a job computes from; nothing in it reaches out to the database. */
export type JobInput =
  | {
      readonly kind: 'fit'
      readonly parameters: FitParameters
      readonly joints: readonly JobJoint[]
      readonly training: readonly Motion[]
      readonly heldOut: readonly Motion[]
      /** Motions that the recommended rate of plain squared error is chosen on. */
      readonly validation: readonly Motion[]
    }
  | {
      readonly kind: 'meta_train'
      readonly parameters: MetaTrainParameters
      readonly lossKind: LearnedLossKind
      /** encodeVersion() of the base. */
      readonly base: Uint8Array
      readonly baseChecksum: string
      readonly training: readonly Motion[]
      readonly validation: readonly Motion[]
    }

export type JobOutput =
  | {
      readonly kind: 'fit'
      readonly artefact: VersionArtefact
      readonly metrics: StoredMetrics
      readonly recommended: Version['recommended']
    }
  | { readonly kind: 'meta_train'; readonly artefact: LossVersion; readonly validation: readonly StoredComparison[] }

/** What a worker is started with. */
export interface WorkerStart {
  readonly input: JobInput
  readonly niceness: number
  /** One Int32, set to 1 to cancel. */
  readonly cancel: SharedArrayBuffer
}

export type WorkerMessage =
  | { readonly kind: 'progress'; readonly progress: number; readonly message: string }
  | { readonly kind: 'point'; readonly series: string; readonly x: number; readonly y: number }
  | { readonly kind: 'done'; readonly output: JobOutput }
  | { readonly kind: 'cancelled' }
  | { readonly kind: 'failed'; readonly slug: ProblemSlug; readonly detail: string; readonly stack?: string }

/** How a handler tells of its work, and hears that it is to stop. */
export interface JobReport {
  progress(share: number, message: string): void
  point(series: string, x: number, y: number): void
  /** @throws {JobCancelled} */
  throwIfCancelled(): void
}

export class JobCancelled extends Error {}

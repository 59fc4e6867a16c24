import type { Fault, ProblemSlug } from '../../../shared/contract/problems.ts'
import type { RecordedJoint } from './csv-columns.ts'
import type { ReadSummary } from './csv-reader.ts'

/** To the reading thread; `id` tells the readings apart that run at the same time. */
export type ReaderMessage =
  | { kind: 'begin'; id: number; joints: readonly RecordedJoint[] }
  | { kind: 'piece'; id: number; piece: Uint8Array }
  | { kind: 'end'; id: number }
  | { kind: 'stored'; id: number }
  | { kind: 'abort'; id: number }

/** From it. */
export type ReaderAnswer =
  | { kind: 'taken'; id: number }
  | { kind: 'chunk'; id: number; chunk: ArrayBuffer }
  | { kind: 'read'; id: number; summary: ReadSummary }
  | { kind: 'refused'; id: number; slug: ProblemSlug; detail: string; errors: Fault[] }
  | { kind: 'failed'; id: number; message: string }

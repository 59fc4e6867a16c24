import type { BatchEntry, BatchOutcome, EventEntry, LogEntry, Reason } from '../../../shared/dynamics/index.ts'

/** A row of the log as the raw connector takes it. */
export interface LogRow {
  readonly adaptationId: string
  readonly position: number
  readonly entry: 'batch' | 'event' | 'command'
  readonly sequence: number | null
  readonly revision: number
  readonly verdict: 'accepted' | 'rejected' | 'stored' | null
  readonly at: Date
  readonly detail: string
  readonly content: Buffer | null
  readonly answer: string
  readonly nextSequence: number
  readonly asOf: number | null
  readonly rejections: number
}

export const logColumns = [
  'adaptation_id', 'position', 'entry', 'sequence', 'revision', 'verdict', 'at', 'detail', 'content', 'answer', 'next_sequence', 'as_of',
  'rejections',
] as const

/** Numbers go as text: the connector's bulk protocol starts a new packet wherever a column's type changes from row to row. */
export function logValues(row: LogRow): (string | Buffer | null)[] {
  const text = (value: number | null) => (value === null ? null : String(value))
  return [
    row.adaptationId, String(row.position), row.entry, text(row.sequence), String(row.revision), row.verdict, sqlTime(row.at), row.detail,
    row.content, row.answer, String(row.nextSequence), text(row.asOf), String(row.rejections),
  ]
}

function sqlTime(at: Date): string {
  return at.toISOString().slice(0, -1).replace('T', ' ')
}

export type AccelerationKind = 'measured' | 'desired' | 'filtered'
export type EventKind = EventEntry['event']

export interface Payload {
  /** kg */
  readonly mass: number
  /** m, in the flange frame */
  readonly centerOfMass?: readonly number[]
}

// What a row's detail says. Keys are always written in this order, so that equal content gives equal text.
export type BatchDetail = { time: number; rows: number; skipped: number; accelerationKind: AccelerationKind }
export type EventDetail = { time: number; skipped: number; kind: EventKind; payload: Payload | null }
export type CommandDetail = { command: 'freeze' | 'resume' | 'reset' | 'end'; by: string; reason: string }

/** What a batch led to, as it is stored and answered; joints in the arm's order. */
export interface BatchResult {
  readonly revision: number
  readonly verdict: BatchOutcome['verdict']
  readonly reasons: readonly Reason[]
  readonly before: number
  readonly after: number | null
  /** N·m (N) */
  readonly jointBefore: ArrayLike<number>
  readonly jointAfter: ArrayLike<number> | null
  readonly weights: ArrayLike<number>
  readonly stepNorm: number | null
}

/** What an event or a command led to. */
export interface ChangeResult {
  readonly revision: number
  readonly state: 'adapting' | 'frozen' | 'ended'
}

export function answerText(outcome: BatchOutcome | ChangeResult): string {
  if (!('verdict' in outcome)) return JSON.stringify({ revision: outcome.revision, state: outcome.state })
  const { revision, verdict, reasons, before, after, jointBefore, jointAfter, weights, stepNorm } = outcome
  const list = (values: Float64Array | null) => (values === null ? null : Array.from(values))
  return JSON.stringify({
    revision, verdict, reasons, before, after, jointBefore: list(jointBefore), jointAfter: list(jointAfter), weights: list(weights), stepNorm,
  })
}

/** What a stored row says to the machine that reads the log again. */
export function entryOf(row: Pick<LogRow, 'entry' | 'sequence' | 'detail' | 'content'>, joints: number): LogEntry {
  if (row.entry === 'batch') {
    const { skipped, rows } = JSON.parse(row.detail) as BatchDetail
    return batchEntry({ sequence: row.sequence as number, skipped, rows, numbers: numbersOf(row.content as Buffer) }, joints)
  }
  if (row.entry === 'event') {
    const { time, skipped, kind } = JSON.parse(row.detail) as EventDetail
    return { kind: 'event', sequence: row.sequence as number, skipped, time, event: kind }
  }
  const { command, reason } = JSON.parse(row.detail) as CommandDetail
  return { kind: 'command', command, reason }
}

/** Views into one block: time, then position, velocity, acceleration and torque. */
export function batchEntry(
  { sequence, skipped, rows, numbers }: { sequence: number; skipped: number; rows: number; numbers: Float64Array }, joints: number,
): BatchEntry {
  const size = rows * joints
  const part = (k: number) => numbers.subarray(rows + k * size, rows + (k + 1) * size)
  return {
    kind: 'batch', sequence, skipped, rows,
    time: numbers.subarray(0, rows), position: part(0), velocity: part(1), acceleration: part(2), torque: part(3),
  }
}

/** The numbers as the bytes that are stored: binary64, little endian. */
export function contentOf(numbers: Float64Array): Buffer {
  return Buffer.from(numbers.buffer, numbers.byteOffset, numbers.byteLength)
}

export function numbersOf(content: Buffer): Float64Array {
  // A copy, since a Float64Array must begin at a multiple of 8.
  const bytes = new Uint8Array(content.length)
  bytes.set(content)
  return new Float64Array(bytes.buffer)
}

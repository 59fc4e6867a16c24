import { Refusal } from '../../shared/contract/problems.ts'

/** What a list is asked for. */
export interface PageRequest {
  readonly cursor?: string
  readonly limit: number
}

export interface Page<T> {
  readonly items: readonly T[]
  readonly nextCursor: string | null
}

/** Where a page ends, opaque to clients: the sort values of its last row. */
export function encodeCursor(position: readonly (string | number)[]): string {
  return Buffer.from(JSON.stringify(position)).toString('base64url')
}

/**
 * The one sort value of a cursor.
 *
 * @throws {Refusal} invalid-request: not a cursor of ours with one value of that kind
 */
export function decodeCursor(cursor: string, kind: 'text'): string
export function decodeCursor(cursor: string, kind: 'number'): number
export function decodeCursor(cursor: string, kind: 'text' | 'number'): string | number {
  try {
    const position = JSON.parse(Buffer.from(cursor, 'base64url').toString('utf8')) as unknown
    const value: unknown = Array.isArray(position) && position.length === 1 ? position[0] : undefined
    // Also no infinity, which JSON can write as 1e999 and SQL cannot.
    if (kind === 'text' ? typeof value === 'string' : Number.isSafeInteger(value)) return value as string | number
  } catch {
    // Told below.
  }
  const detail = 'This is no cursor of this list. Take next_cursor from the page before, unchanged, or leave it out for the first page.'
  throw new Refusal('invalid-request', `cursor: ${detail}`, { errors: [{ pointer: 'cursor', detail }] })
}

/** From one row more than asked for: the page, and where the next one begins. */
export function pageOf<Row, T>(rows: readonly Row[], limit: number, positionOf: (row: Row) => readonly (string | number)[], item: (row: Row) => T): Page<T> {
  const shown = rows.slice(0, limit)
  const last = shown.at(-1)
  return { items: shown.map(item), nextCursor: rows.length > limit && last !== undefined ? encodeCursor(positionOf(last)) : null }
}

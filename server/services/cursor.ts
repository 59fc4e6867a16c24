import { Refusal } from '../../shared/contract/problems.ts'

/** What a list is asked for. */
export interface PageRequest {
  readonly cursor?: string
  readonly limit: number
}

/** A page; `nextCursor` is null on the last one. */
export interface Page<T> {
  readonly items: T[]
  readonly nextCursor: string | null
}

/** Sort keys of lists: ids (UUIDv7 rise with time), names, or numbers that count up. */
export type CursorKey = string | number

/** A cursor names its list and the last key shown, so that one of another list is noticed. Callers treat it as opaque. */
export function encodeCursor(list: string, key: CursorKey): string {
  return Buffer.from(JSON.stringify([list, key])).toString('base64url')
}

/** @throws {Refusal} invalid-request: not a cursor of this list */
export function decodeCursor(list: string, cursor: string, type: 'string' | 'number'): CursorKey {
  const found = readJson(Buffer.from(cursor, 'base64url').toString())
  if (Array.isArray(found) && found.length === 2 && found[0] === list && typeof found[1] === type) return found[1] as CursorKey
  const detail = `cursor: "${cursor.slice(0, 60)}" is no cursor of this list. Take next_cursor of the page before, or start without one.`
  throw new Refusal('invalid-request', detail, { errors: [{ pointer: 'cursor', detail }] })
}

/**
 * Cuts a page out of rows that were read with one more than the limit.
 *
 * @param rows  up to limit + 1, in the list's order
 */
export function pageOf<T>(list: string, rows: readonly T[], limit: number, keyOf: (row: T) => CursorKey): Page<T> {
  const items = rows.slice(0, limit)
  return { items, nextCursor: rows.length > limit ? encodeCursor(list, keyOf(items[items.length - 1])) : null }
}

function readJson(text: string): unknown {
  try {
    return JSON.parse(text)
  } catch {
    return undefined
  }
}

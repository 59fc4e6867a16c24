import { describe, expect, it } from 'vitest'
import { decodeCursor, encodeCursor, pageOf } from '../../../server/services/cursor.ts'
import { Refusal } from '../../../shared/contract/problems.ts'

describe('cursors', () => {
  it('come back as the key they were made of', () => {
    expect(decodeCursor('arms', encodeCursor('arms', 'heron-7'), 'string')).toBe('heron-7')
    expect(decodeCursor('releases', encodeCursor('releases', 41), 'number')).toBe(41)
  })

  it.each([
    ['of another list', encodeCursor('models', 'heron-7')],
    ['with a key of another type', encodeCursor('arms', 7)],
    ['that is JSON of another shape', Buffer.from('{"a":1}').toString('base64url')],
    ['with a third value', Buffer.from('["arms","a","b"]').toString('base64url')],
    ['that is text', 'next please'],
    ['that is empty', ''],
  ])('refuse one %s and say what to do', (_, cursor) => {
    expect(() => decodeCursor('arms', cursor, 'string')).toThrow(Refusal)
    expect(() => decodeCursor('arms', cursor, 'string')).toThrow(/start without one/)
  })

  it('end with the last page', () => {
    expect(pageOf('n', [1, 2], 2, (n) => n).nextCursor).toBeNull()
    expect(pageOf('n', [], 2, (n: number) => n)).toEqual({ items: [], nextCursor: null })

    const { items, nextCursor } = pageOf('n', [1, 2, 3], 2, (n) => n)

    expect(items).toEqual([1, 2])
    expect(decodeCursor('n', nextCursor!, 'number')).toBe(2)
  })
})

/**
 * A typed array handed to the numeric core has the wrong length, or a size is not usable. The message names the argument,
 * the length found and the length expected.
 */
export class ShapeError extends Error {
  override readonly name = 'ShapeError'
}

/**
 * Refuses an array whose length is not the one expected.
 *
 * @param what  name of the argument, as the caller knows it
 * @param found  its length
 * @param expected  the length it must have
 * @param because  what decides the expected length, for the message: `4 rows of 21 inputs`
 * @throws {ShapeError} found is not expected
 */
export function checkLength(what: string, found: number, expected: number, because: string): void {
  if (found !== expected) throw new ShapeError(`${what} has ${found} values, expected ${expected} (${because}).`)
}

/**
 * Refuses a row count outside 1..maximum, the number of rows a work area was made for.
 *
 * @throws {ShapeError} rows is not an integer of that range
 */
export function checkRows(rows: number, maximum: number): void {
  if (!Number.isInteger(rows) || rows < 1 || rows > maximum) {
    throw new ShapeError(`${rows} rows, expected 1 to ${maximum}: the work area was made for that many.`)
  }
}

import { isList, RowMatrix, ShapedArray } from './cbor-reader.ts'
import { shown } from './faults.ts'
import type { Faults } from './faults.ts'
import type { JointOrder } from './joint-order.ts'

/** Magnitudes from here on are refused: no arm reaches them, and binary32 arithmetic should stay far from its end. */
export const largestState = 1e7

/**
 * Reads a matrix of states, an array of rows or a typed array with its dimensions (tag 40), into row-major arm order.
 *
 * @param rows  how many are expected
 * @param into  rows × n, overwritten
 * @returns whether it was sound; if not, faults say where
 */
export function readMatrix(
  name: string, value: unknown, rows: number, { names, order }: JointOrder, into: Float64Array, faults: Faults,
): boolean {
  const sound = value instanceof ShapedArray ? shapedInto(value, rows, names.length, order, into)
    : Array.isArray(value) && value.length === rows && rowsInto(value, names.length, order, into)
  if (!sound) explainMatrix(name, value, rows, names, faults)
  return sound
}

/** How many rows a matrix has, as far as it is one. */
export function rowsOf(value: unknown): number | null {
  if (Array.isArray(value)) return value.length
  return value instanceof ShapedArray && value.dimensions.length === 2 ? value.dimensions[0] : null
}

function rowsInto(rows: readonly unknown[], n: number, order: Int32Array | null, into: Float64Array): boolean {
  for (let r = 0, at = 0; r < rows.length; r++, at += n) {
    const row = rows[r]
    if (!isList(row) || row.length !== n) return false
    for (let k = 0; k < n; k++) {
      const x = row[k]
      // Also false for NaN, which CBOR can carry.
      if (typeof x !== 'number' || !(x <= largestState && x >= -largestState)) return false
      into[at + (order === null ? k : order[k])] = x
    }
  }
  return true
}

function shapedInto({ dimensions, values }: ShapedArray, rows: number, n: number, order: Int32Array | null, into: Float64Array): boolean {
  if (dimensions.length !== 2 || dimensions[0] !== rows || dimensions[1] !== n) return false
  if (order === null && ArrayBuffer.isView(values)) {
    // As one block, which is a tenth of the work.
    into.set(values as Float64Array)
    return areStates(into, rows * n)
  }
  for (let r = 0, at = 0; r < rows; r++, at += n) {
    for (let k = 0; k < n; k++) {
      const x = values[at + k]
      if (typeof x !== 'number' || !(x <= largestState && x >= -largestState)) return false
      into[at + (order === null ? k : order[k])] = x
    }
  }
  return true
}

function areStates(values: Float64Array, count: number): boolean {
  for (let k = 0; k < count; k++) if (!(values[k] <= largestState && values[k] >= -largestState)) return false
  return true
}

function explainMatrix(name: string, value: unknown, rows: number, joints: readonly string[], faults: Faults): void {
  const pointer = `/${name}`
  const n = joints.length
  const perJoint = `Send one value per joint, in the order of joint_names.`
  if (value instanceof ShapedArray && !(value instanceof RowMatrix)) {
    if (value.dimensions.length !== 2 || value.dimensions[0] !== rows || value.dimensions[1] !== n) {
      faults.add({ pointer, detail: `${name} is ${value.dimensions.join(' × ')}, expected ${rows} × ${n}: rows × joints. ${perJoint}` })
      return
    }
    for (let k = 0; k < rows * n && !faults.full; k++) explainNumber(name, value.values[k], Math.floor(k / n), k % n, joints, faults)
    return
  }
  const count = rowsOf(value)
  if (count === null) {
    const found = value === undefined ? 'missing' : shown(value)
    faults.add({ pointer, detail: `${name} is ${found}, expected an array of rows, or in CBOR a typed array with its dimensions (tag 40).` })
    return
  }
  if (count !== rows) {
    faults.add({ pointer, detail: `${name} has ${count} rows, the request has ${rows}. Send one row per state in each matrix.` })
    return
  }
  for (let r = 0; r < rows && !faults.full; r++) {
    const row: unknown = value instanceof RowMatrix ? value.row(r) : (value as readonly unknown[])[r]
    if (!isList(row)) {
      faults.add({ pointer: `${pointer}/${r}`, row: r, detail: `${name}: row ${r} is ${shown(row)}, expected an array of ${n} numbers.` })
    } else if (row.length !== n) {
      faults.add({ pointer: `${pointer}/${r}`, row: r, detail: `${name}: row ${r} has ${row.length} values, the arm has ${n} joints. ${perJoint}` })
    } else {
      for (let k = 0; k < n && !faults.full; k++) explainNumber(name, row[k], r, k, joints, faults)
    }
  }
}

function explainNumber(name: string, x: unknown, row: number, k: number, joints: readonly string[], faults: Faults): void {
  if (typeof x === 'number' && x <= largestState && x >= -largestState) return
  const where = { pointer: `/${name}/${row}/${k}`, row, joint: joints[k] }
  const found = `${name}: row ${row}, joint "${joints[k]}" is ${shown(x)}`
  if (typeof x === 'number' && Number.isFinite(x)) {
    faults.add({ ...where, detail: `${found}, beyond ${largestState} in SI units. Check unit and decoding.` })
  } else {
    faults.add({ ...where, detail: `${found}, expected a finite number. Leave out the whole row where a value is absent.` })
  }
}

/** Reads a list of one number per row. */
export function readPerRow(
  name: string, value: unknown, rows: number, into: Float64Array, faults: Faults, { least = -Infinity, rising = false } = {},
): boolean {
  const pointer = `/${name}`
  const list = value instanceof ShapedArray && value.dimensions.length === 1 ? value.values : value
  if (!isList(list)) {
    const found = value === undefined ? 'missing' : shown(value)
    faults.add({ pointer, detail: `${name} is ${found}, expected an array of ${rows} numbers, one per row.` })
    return false
  }
  if (list.length !== rows) {
    faults.add({ pointer, detail: `${name} has ${list.length} values, the request has ${rows} rows. Send one per row.` })
    return false
  }
  for (let r = 0; r < rows; r++) {
    const x = list[r]
    if (typeof x !== 'number' || !Number.isFinite(x) || x < least) {
      const wanted = least === -Infinity ? 'a finite number' : `a finite number from ${least}`
      faults.add({ pointer: `${pointer}/${r}`, row: r, detail: `${name}: row ${r} is ${shown(x)}, expected ${wanted}.` })
      return false
    }
    if (rising && r > 0 && !(x > into[r - 1])) {
      faults.add({ pointer: `${pointer}/${r}`, row: r, detail: `${name}: row ${r} is ${x}, row ${r - 1} is ${into[r - 1]}. Times must rise strictly.` }, 'time-not-rising')
      return false
    }
    into[r] = x
  }
  return true
}

import { createHash } from 'node:crypto'
import { Readable } from 'node:stream'
import { CsvError, parse } from 'csv-parse'
import { Refusal, type Fault } from '../../../shared/contract/problems.ts'
import { placeColumns, type Column, type RecordedJoint } from './csv-columns.ts'
import { createMedian } from './streaming-median.ts'
import { createChunkWriter, storedWidth } from './stored-rows.ts'

/** What a whole file turned out to be. */
export interface ReadSummary {
  readonly rows: number
  /** s, first to last row. */
  readonly duration: number
  /** Hz, from the median period. */
  readonly rate: number
  readonly bytes: number
  /** SHA-256 of the file, hex. */
  readonly checksum: string
}

/** Two seconds at 50 Hz: less shows no motion to learn from. Common practice, no source. */
export const LEAST_ROWS = 100
/** Hz. What is logged slower misses the accelerations that torque goes into. */
export const LEAST_RATE = 20
/** Hz. No arm logs as fast; such times are in another unit. */
const MOST_RATE = 100_000
/** Magnitude of a time (s), and of everything else in SI units; as on the hot routes, no arm comes near it. */
const LARGEST_TIME = 1e12
const LARGEST_VALUE = 1e7
/** A position this many times beyond its limit is in another unit. Degrees read as radians are 57 times too large. */
const FAR_BEYOND = 4
const MOST_FAULTS = 10

/**
 * Reads a recording from CSV and hands its rows on in binary chunks, with constant memory.
 *
 * Nothing is filled in: an empty cell, NaN or text is refused with its line, joint and column.
 *
 * @param source  the file's bytes
 * @param store  takes one chunk; reading waits for it
 * @throws {Refusal} recording-unreadable
 */
export async function readRecording(
  source: AsyncIterable<Uint8Array>,
  joints: readonly RecordedJoint[],
  store: (chunk: ArrayBuffer) => Promise<void>,
): Promise<ReadSummary> {
  const hash = createHash('sha256')
  let bytes = 0
  async function* counted() {
    for await (const piece of source) {
      hash.update(piece)
      bytes += piece.byteLength
      yield piece
    }
  }
  const input = Readable.from(counted(), { objectMode: false })
  const records = parse({ bom: true, relax_column_count: true, skip_empty_lines: true, info: true, max_record_size: 1_000_000 })
  input.on('error', (error) => records.destroy(error)).pipe(records)
  const chunks = createChunkWriter(joints.length)
  let rows: RowChecker | undefined
  try {
    for await (const { record, info } of records as AsyncIterable<{ record: string[]; info: { lines: number } }>) {
      if (!rows) {
        rows = createRowChecker(joints, record)
        continue
      }
      const full = chunks.add(rows.check(record, info.lines))
      if (full && !rows.hasFaults()) await store(full)
    }
  } catch (error) {
    if (error instanceof CsvError) throw unreadableCsv(error)
    throw error
  } finally {
    input.destroy()
  }
  if (!rows) throw new Refusal('recording-unreadable', 'The file is empty. Send a header and at least 100 rows.')
  const { duration, rate, count } = rows.end()
  const rest = chunks.rest()
  if (rest) await store(rest)
  return { rows: count, duration, rate, bytes, checksum: hash.digest('hex') }
}

interface RowChecker {
  /** The row in stored order; valid until the next call. */
  check(record: readonly string[], line: number): Float64Array
  hasFaults(): boolean
  /** @throws {Refusal} there were faults, or the whole cannot be learned from */
  end(): { count: number; duration: number; rate: number }
}

function createRowChecker(joints: readonly RecordedJoint[], header: readonly string[]): RowChecker {
  const { places, columns } = placeColumns(header, joints)
  const row = new Float64Array(storedWidth(joints.length))
  const farPosition = columns.map((column) => farPositionOf(joints, column))
  const periods = createMedian()
  const faults: Fault[] = []
  let count = 0
  let first = NaN
  let last = -Infinity

  function fault(detail: string, joint: number): void {
    faults.push({ row: count, ...(joint >= 0 && { joint: joints[joint].name }), detail })
    if (faults.length >= MOST_FAULTS) refuse()
  }

  function refuse(): never {
    const more =
      faults.length > 1
        ? ` ${faults.length < MOST_FAULTS ? '' : 'At least '}${faults.length} such faults; each is in "errors".`
        : ''
    throw new Refusal('recording-unreadable', faults[0].detail + more, { errors: faults })
  }

  function checkTime(time: number, line: number): void {
    if (count === 0) first = time
    else if (time <= last) {
      fault(
        `line ${line}, column time: ${time} s comes after ${last} s. Time must rise from row to row; ` +
        'sort the log, or cut it where the clock was set.',
        -1,
      )
    } else periods.add(time - last)
    last = Math.max(last, time)
  }

  return {
    check(record, line) {
      if (record.length !== header.length) {
        fault(
          `line ${line} has ${record.length} values, the header has ${header.length} columns. ` +
          'Every row needs a value in every column.',
          -1,
        )
        count += 1
        return row
      }
      for (let k = 0; k < row.length; k++) {
        const text = record[places[k]]
        const value = readNumber(text)
        row[k] = value
        if (Number.isNaN(value)) fault(absentValue(columns[k], joints, text, line), columns[k].joint)
        else if (Math.abs(value) > (k === 0 ? LARGEST_TIME : LARGEST_VALUE)) fault(tooLarge(columns[k], value, line), columns[k].joint)
        else if (Math.abs(value) > farPosition[k]) fault(farBeyondLimit(columns[k], joints, value, line), columns[k].joint)
      }
      if (!Number.isNaN(row[0])) checkTime(row[0], line)
      count += 1
      return row
    },

    hasFaults: () => faults.length > 0,

    end() {
      if (faults.length > 0) refuse()
      if (count < LEAST_ROWS) {
        throw new Refusal(
          'recording-unreadable',
          `The file has ${count} rows; at least ${LEAST_ROWS} are needed to learn from. Record a longer motion.`,
        )
      }
      const rate = 1 / periods.value()
      if (rate < LEAST_RATE * 0.999) {
        throw new Refusal(
          'recording-unreadable',
          `The rows come at ${rate.toPrecision(3)} Hz; ` +
          `at least ${LEAST_RATE} Hz are needed, since slower logs miss the accelerations. Log at 100 Hz or more.`,
        )
      }
      if (rate > MOST_RATE) {
        throw new Refusal('recording-unreadable', `The rows come at ${rate.toPrecision(3)} Hz. Is time in seconds? Send seconds.`)
      }
      return { count, duration: Number((last - first).toPrecision(12)), rate: Number(rate.toPrecision(6)) }
    },
  }
}

/** Digits, sign, point and exponent; NaN for everything else that Number() would take: blanks, hexadecimal, infinity. */
export function readNumber(text: string): number {
  const value = Number(text)
  if (value === 0 && text.trim() === '') return NaN
  if (!Number.isFinite(value)) return NaN
  const second = text.trimStart()[1]
  return second === 'x' || second === 'X' || second === 'b' || second === 'B' || second === 'o' || second === 'O' ? NaN : value
}

function absentValue({ title, joint }: Column, joints: readonly RecordedJoint[], text: string, line: number): string {
  const found = text.trim() === '' ? 'is empty' : `is "${text.trim().slice(0, 40)}"`
  const whose = joint < 0 ? '' : ` (joint ${joints[joint].name})`
  return `line ${line}, column ${title}${whose} ${found}, expected a number. Missing values are not filled in: ` +
    'cut the log there, or repair it.'
}

function tooLarge({ title }: Column, value: number, line: number): string {
  return `line ${line}, column ${title}: ${value} is beyond anything in SI units. Check unit and decoding.`
}

function farPositionOf(joints: readonly RecordedJoint[], { quantity, joint }: Column): number {
  if (quantity !== 'position') return Infinity
  const { type, positionLower, positionUpper } = joints[joint]
  if (type === 'continuous' || positionLower === undefined || positionUpper === undefined) return Infinity
  return FAR_BEYOND * Math.max(Math.abs(positionLower), Math.abs(positionUpper))
}

function farBeyondLimit({ title, joint }: Column, joints: readonly RecordedJoint[], value: number, line: number): string {
  const { name, type, positionLower, positionUpper } = joints[joint]
  const [unit, suspicion] = type === 'prismatic' ? ['m', 'millimetres?'] : ['rad', 'degrees?']
  return (
    `line ${line}, column ${title}: ` +
    `${value} ${unit} is far outside joint ${name}'s limits of ${positionLower} to ${positionUpper} ${unit}. ` +
    `Is it in ${suspicion} Send ${unit} and ${unit}/s and ${unit}/s².`
  )
}

function unreadableCsv(error: CsvError): Refusal {
  const line = (error as unknown as { lines?: number }).lines
  const what = error.code === 'CSV_MAX_RECORD_SIZE' ? 'a line is longer than a megabyte' : printable(error.message).slice(0, 200)
  return new Refusal(
    'recording-unreadable',
    `${line === undefined ? '' : `line ${line}: `}the file cannot be read as CSV: ${what}. ` +
    'Send text with commas between columns and one line per row.',
    { cause: error },
  )
}

function printable(text: string): string {
  return text.split('\n')[0].replace(/\\u00[01][0-9a-f]|[^\x20-\uffff]/g, '·')
}

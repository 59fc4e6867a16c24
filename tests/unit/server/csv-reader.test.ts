import { createHash } from 'node:crypto'
import { describe, expect, it } from 'vitest'
import { LEAST_ROWS, readNumber, readRecording } from '../../../server/services/recordings/csv-reader.ts'
import { motionOfChunks, rowsPerChunk } from '../../../server/services/recordings/stored-rows.ts'
import { Refusal } from '../../../shared/contract/problems.ts'
import { csvOf, twoJointHeader, twoJointRows } from '../../support/recording-csv.ts'

const joints = [
  { name: 'swivel', type: 'revolute' as const, positionLower: -2.5, positionUpper: 2.5 },
  { name: 'lift', type: 'revolute' as const, positionLower: -2, positionUpper: 2 },
]

async function* inPieces(bytes: Uint8Array, size: number) {
  for (let at = 0; at < bytes.length; at += size) yield bytes.subarray(at, at + size)
}

async function read(text: string | Uint8Array, pieceSize = 1000) {
  const bytes = typeof text === 'string' ? new TextEncoder().encode(text) : text
  const chunks: Uint8Array[] = []
  const summary = await readRecording(
    inPieces(bytes, pieceSize),
    joints,
    async (chunk) => void chunks.push(new Uint8Array(chunk)),
  )
  return { summary, motion: motionOfChunks('test', 2, chunks), chunks }
}

async function refusal(text: string | Uint8Array): Promise<Refusal> {
  const error = await read(text).then(
    () => new Error('it was read'),
    (thrown: Error) => thrown,
  )
  if (!(error instanceof Refusal)) throw error
  expect(error.kind.slug).toBe('recording-unreadable')
  return error
}

const rows = twoJointRows({ rows: 150 })
const changed = (row: number, column: number, value: number | string) =>
  csvOf(
    twoJointHeader,
    rows.map((cells, r) => (r === row ? cells.map((cell, c) => (c === column ? value : cell)) : cells)),
  )

describe('reading a recording', () => {
  it('keeps every number in its place and says what the file is', async () => {
    const text = csvOf(twoJointHeader, rows)

    const { summary, motion } = await read(text)

    expect(summary).toEqual({
      rows: 150,
      duration: 2.98,
      rate: 50,
      bytes: text.length,
      checksum: createHash('sha256').update(text).digest('hex'),
    })
    const written = (value: number) => Number(value.toPrecision(8))
    expect([...motion.time]).toEqual(rows.map((cells) => written(cells[0])))
    expect([...motion.states.subarray(6 * 149)]).toEqual(rows[149].slice(1, 7).map(written))
    expect([...motion.torque.subarray(2 * 149)]).toEqual(rows[149].slice(7).map(written))
  })

  it.each([
    [
      'columns in any order',
      (t: string) =>
        t
          .split('\n')
          .map((line) => line.split(',').reverse().join(','))
          .join('\n'),
    ],
    ['effort for torque', (t: string) => t.replaceAll('torque_', 'effort_')],
    ['a byte order mark', (t: string) => `\uFEFF${t}`],
    ['CRLF line ends', (t: string) => t.replaceAll('\n', '\r\n')],
    [
      'quoted cells',
      (t: string) =>
        t
          .split('\n')
          .map(
            (line) =>
              line &&
              line
                .split(',')
                .map((cell) => `"${cell}"`)
                .join(','),
          )
          .join('\n'),
    ],
    ['blanks around cells', (t: string) => t.replaceAll(',', ' , ')],
    ['no line end at the end', (t: string) => t.trimEnd()],
    ['empty lines', (t: string) => t.replaceAll('\n', '\n\n')],
  ])('takes %s', async (_, rewrite) => {
    const plain = csvOf(twoJointHeader, rows)

    const { motion } = await read(rewrite(plain))

    expect(motion).toEqual((await read(plain)).motion)
  })

  it('reads the same whatever pieces the bytes come in', async () => {
    const text = csvOf(twoJointHeader, rows, '\r\n')

    expect((await read(text, 1)).motion).toEqual((await read(text, 1e6)).motion)
  })

  it('cuts long recordings into chunks of at most a megabyte', async () => {
    const long = twoJointRows({ rows: rowsPerChunk(2) + 10 })

    const { chunks, motion } = await read(csvOf(twoJointHeader, long), 65536)

    expect(chunks).toHaveLength(2)
    expect(chunks[0].byteLength).toBeLessThanOrEqual(1_000_000)
    expect(motion.rows).toBe(long.length)
    expect(motion.time.at(-1)).toBeCloseTo(long.at(-1)![0], 9)
  })

  it.each([
    ['an empty cell', '', /line 12, column velocity_lift \(joint lift\) is empty/],
    ['NaN', 'NaN', /line 12, column velocity_lift \(joint lift\) is "NaN", expected a number/],
    ['null', 'null', /is "null"/],
    ['infinity', 'Infinity', /is "Infinity"/],
    ['blanks', '   ', /is empty/],
    ['hexadecimal', '0x1F', /is "0x1F"/],
    ['a number too large for a double', '1e999', /is "1e999"/],
  ])('refuses %s with row and joint, and fills nothing in', async (_, value, message) => {
    const { message: detail, errors } = await refusal(changed(10, 4, value))

    expect(detail).toMatch(message)
    expect(errors[0]).toMatchObject({ row: 10, joint: 'lift' })
  })

  it('lists several faults and stops at ten', async () => {
    const spoilt = csvOf(
      twoJointHeader,
      rows.map((cells) => cells.map((cell, c) => (c === 3 ? '' : cell))),
    )

    expect((await refusal(spoilt)).errors).toHaveLength(10)
  })

  it.each([
    [
      'a missing column',
      (h: string[]) => h.with(3, 'x_swivel'),
      /Column velocity_swivel is missing\. Column "x_swivel" is unknown/,
    ],
    ['a doubled column', (h: string[]) => h.with(3, 'velocity_lift'), /Column velocity_lift is there twice/],
    [
      'torque and effort of one joint',
      (h: string[]) => h.with(7, 'effort_lift'),
      /Column torque_lift is there twice|Column effort_lift is there twice/,
    ],
    [
      'an unknown joint',
      (h: string[]) => h.map((title) => title.replace('lift', 'tilt')),
      /"position_tilt" is unknown[\s\S]*joints are swivel, lift/,
    ],
  ])('refuses %s by name', async (_, rename, message) => {
    expect((await refusal(csvOf(rename(twoJointHeader), rows))).message).toMatch(message)
  })

  it('says how to get accelerations when the log has none', async () => {
    const without = (cells: readonly (number | string)[]) => cells.filter((_, c) => c !== 5 && c !== 6)

    const { message } = await refusal(csvOf(without(twoJointHeader) as string[], rows.map(without)))

    expect(message).toMatch(/no acceleration column.*zero-phase low-pass/)
  })

  it.each([
    ['time that stands still', changed(20, 0, rows[19][0]), /line 22, column time: 0.38 s comes after 0.38 s/],
    ['time that steps back', changed(20, 0, 0.1), /line 22, column time: 0.1 s comes after 0.38 s/],
    ['too few rows', csvOf(twoJointHeader, rows.slice(0, LEAST_ROWS - 1)), /has 99 rows; at least 100/],
    ['a slow log', csvOf(twoJointHeader, twoJointRows({ rows: 150, rate: 10 })), /come at 10\.0 Hz; at least 20 Hz/],
    ['a short row', csvOf(twoJointHeader, rows).replace(/,[^,\n]*\n$/, '\n'), /line 151 has 8 values, the header has 9/],
    ['degrees', changed(3, 1, 57.3), /line 5, column position_swivel: 57.3 rad is far outside.*degrees\?/],
    ['semicolons', csvOf(twoJointHeader, rows).replaceAll(',', ';'), /separated by semicolons/],
    ['no header', csvOf(rows[0].map(String), rows.slice(1)), /line 1 holds numbers/],
    ['an unclosed quote', changed(5, 2, '"0.1'), /cannot be read as CSV/],
    ['an empty file', '', /The file is empty/],
    ['a header alone', csvOf(twoJointHeader, []), /has 0 rows/],
  ])('refuses %s and says what to do', async (_, text, message) => {
    expect((await refusal(text)).message).toMatch(message)
  })

  it('refuses a file that is no text', async () => {
    await refusal(Uint8Array.from({ length: 5000 }, (_, k) => (k * 7919) % 256))
  })

  it('takes 20 Hz exactly', async () => {
    const { summary } = await read(csvOf(twoJointHeader, twoJointRows({ rows: 150, rate: 20 })))

    expect(summary.rate).toBe(20)
  })
})

describe('reading a number', () => {
  it.each([
    ['1', 1],
    ['-1.5e-3', -1.5e-3],
    ['+2', 2],
    ['.5', 0.5],
    [' 7 ', 7],
    ['0', 0],
    ['-0.0', -0],
  ])('takes %s', (text, value) => expect(readNumber(text)).toBe(value))

  it.each(['', ' ', '0x10', ' 0X1', '0b1', '0o7', '1,5', '1_000', 'Infinity', 'one'])('refuses "%s"', (text) => {
    expect(readNumber(text)).toBeNaN()
  })
})

describe('numbers that no arm sends', () => {
  it.each([
    ['a torque of 1e300', changed(4, 7, '1e300'), /line 6, column torque_\w+: 1e\+300 is beyond anything in SI units/],
    ['a time of 1e308', changed(149, 0, '1e308'), /line 151, column time: 1e\+308 is beyond/],
    [
      'times that hardly differ',
      csvOf(twoJointHeader, rows.map((cells, r) => [`${r}e-320`, ...cells.slice(1)])),
      /The rows come at Infinity Hz\. Is time in seconds\?/,
    ],
  ])('%s is refused', async (_, text, detail) => {
    expect((await refusal(text)).message).toMatch(detail)
  })
})

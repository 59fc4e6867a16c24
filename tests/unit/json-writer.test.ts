import { expect, test } from 'vitest'
import { JsonWriter } from '../../server/routes/hot/json-writer.ts'
import { createRandom } from '../../shared/dynamics/random.ts'

const writer = new JsonWriter(16)

function written(write: (to: JsonWriter) => void): string {
  writer.clear()
  write(writer)
  return Buffer.from(writer.take(), 'latin1').toString('utf8')
}

const numberText = (value: number) => written((to) => to.number(value))

test.each([
  [0, '0'], [-0, '0'], [1, '1'], [-1, '-1'], [10, '10'], [0.1, '0.1'], [-12.5, '-12.5'], [123456, '123456'], [1234567, '1234570'],
  [999999.5, '1000000'], [0.00001234567, '0.0000123457'], [0.000001234567, '0.00000123457'], [1.5e-9, '1.5e-9'], [1e21, '1e+21'],
  [5e-324, '5e-324'], [-1.7976931348623157e308, '-1.79769e+308'],
])('%d is written as %s', (value, text) => {
  expect(numberText(value)).toBe(text)
})

test('numbers that are not finite are written as null, which JSON has', () => {
  expect([NaN, Infinity, -Infinity].map(numberText)).toEqual(['null', 'null', 'null'])
})

test('any finite double is written as its six-digit rounding', () => {
  const random = createRandom(7)
  const double = new Float64Array(1)
  const halves = new Uint32Array(double.buffer)
  for (let k = 0; k < 200_000; k++) {
    halves[0] = random.uniform() * 2 ** 32
    halves[1] = random.uniform() * 2 ** 32
    // Every second one of the size that torques have.
    const value = k % 2 === 0 ? double[0] : (random.uniform() - 0.5) * 10 ** (random.integer(12) - 6)
    if (!Number.isFinite(value)) continue
    expect(JSON.parse(numberText(value))).toBe(Number(value.toPrecision(6)) + 0)
  }
})

test('decimals next to a tie are rounded as their exact value asks', () => {
  for (let whole = 100_000; whole < 1_000_000; whole += 997) {
    for (const scale of [1e-3, 1, 1e4]) {
      const value = (whole + 0.5) * scale
      expect(JSON.parse(numberText(value))).toBe(Number(value.toPrecision(6)))
    }
  }
})

test('a matrix is written row by row, its columns in the order asked for', () => {
  const matrix = [1, 2, 3, 4.5, -5, 6]

  expect(written((to) => to.matrix(matrix, 2, 3, null))).toBe('[[1,2,3],[4.5,-5,6]]')
  expect(written((to) => to.matrix(matrix, 2, 3, Int32Array.of(2, 0, 1)))).toBe('[[3,1,2],[6,4.5,-5]]')
})

test('what is longer than the room it began with, and not ASCII, arrives whole', () => {
  const text = 'N·m '.repeat(500)

  expect(written((to) => to.raw(text))).toBe(text)
  expect(written((to) => to.pairs([1, 2, 3, 4], 2))).toBe('[[1,2],[3,4]]')
  expect(written((to) => to.pairs([], 0))).toBe('[]')
})

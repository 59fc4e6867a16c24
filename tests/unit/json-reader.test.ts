import { expect, test } from 'vitest'
import { RowMatrix } from '../../server/routes/hot/cbor-reader.ts'
import { readPlainJson } from '../../server/routes/hot/json-reader.ts'
import { createRandom } from '../../shared/dynamics/random.ts'

const read = (text: string) => readPlainJson(Buffer.from(text))

const rowsOf = (matrix: RowMatrix) => Array.from({ length: matrix.dimensions[0] }, (_, row) => Array.from(matrix.row(row)))

/** As JSON.parse gives it: the engine's own parser is the reference. */
function asPlain(body: Record<string, unknown> | undefined) {
  return body && Object.fromEntries(Object.entries(body).map(([key, value]) => [key, value instanceof RowMatrix ? rowsOf(value) : value]))
}

test.each([
  '{"joints":"0123456789ab","position":[[1,2],[3,4]]}', ' { "a" : [ [ 1 , -2.5e3 ] ,\n[ 0 , 1E-2 ] ] , "t" : [ 0.5 , 1 ] , "n" : [ "x" , "y" ] , "k" : 7 }\t',
  '{"a":[[0]],"b":[[-0.0]],"c":[[123456789012345678901234567890]],"d":[[1e-30]],"e":[[5e-324]],"f":[[1.7976931348623157e308]]}',
])('%s is read as JSON.parse reads it', (text) => {
  expect(asPlain(read(text))).toEqual(JSON.parse(text))
})

test.each([
  '', '{}', '[]', '[[1]]', '{"a":[]}', '{"a":[[]]}', '{"a":null}', '{"a":[[null]]}', '{"a":[[1],[1,2]]}', '{"a":[[[1]]]}', '{"a":{}}', '{"a":true}', '{"a":"\\u0041"}', '{"ä":1}',
  '{"a":01}', '{"a":.5}', '{"a":1.}', '{"a":+1}', '{"a":1e}', '{"a":-}', '{"a":0x1}', '{"a":NaN}', '{"a":[1,]}', '{"a":[[1],]}', '{"a":1,}', '{"a":1}x', '{"a":1,"a":2}',
  '{"a":"x', '{"a":[[1,2', '{"a":[[1,2]', '{"a":[["x"]]}', '{a:1}', '{"a" 1}', '{"a":1 "b":2}',
])('%s is left to JSON.parse', (text) => {
  expect(read(text)).toBeUndefined()
})

test('numbers of any length are read to the very double that JSON.parse reads', () => {
  const random = createRandom(3)
  const anyDouble = new Float64Array(1)
  const halves = new Uint32Array(anyDouble.buffer)
  for (let round = 0; round < 4000; round++) {
    halves[0] = random.uniform() * 2 ** 32
    halves[1] = random.uniform() * 2 ** 32
    const value = (random.uniform() - 0.5) * 10 ** (random.integer(16) - 8)
    const texts = [
      String(value), value.toPrecision(1 + random.integer(21)), `${random.integer(1e9)}.${random.integer(1e9)}${random.integer(1e9)}`,
      `${random.integer(1000)}e${random.integer(60) - 30}`, ...(Number.isFinite(anyDouble[0]) ? [String(anyDouble[0])] : []),
    ]
    const text = `{"a":[[${texts.join(',')}]]}`

    expect(Array.from((read(text)!.a as RowMatrix).values as Float64Array)).toEqual(JSON.parse(text).a[0])
  }
})

test('bodies do not share numbers: one that is kept stays as it was when the next is read', () => {
  const first = read('{"a":[[1,2],[3,4]]}')!

  read('{"a":[[9,9],[9,9]]}')

  expect(asPlain(first)).toEqual({ a: [[1, 2], [3, 4]] })
})

import { encode } from 'cborg'
import { decode } from 'cborg'
import { describe, expect, test } from 'vitest'
import { CborError, readCbor, ShapedArray } from '../../server/routes/hot/cbor-reader.ts'
import { writeCbor } from '../../server/routes/hot/cbor-writer.ts'

const bytes = (hex: string) => Buffer.from(hex.replaceAll(' ', ''), 'hex')

describe('examples of RFC 8949, appendix A', () => {
  test.each<[string, unknown]>([
    ['00', 0], ['17', 23], ['1818', 24], ['1903e8', 1000], ['1a000f4240', 1000000], ['1b000000e8d4a51000', 1000000000000],
    ['20', -1], ['3863', -100], ['3903e7', -1000], ['f90000', 0], ['f98000', -0], ['f93c00', 1], ['fb3ff199999999999a', 1.1],
    ['f93e00', 1.5], ['f97bff', 65504], ['fa47c35000', 100000], ['fa7f7fffff', 3.4028234663852886e38], ['fb7e37e43c8800759c', 1e300],
    ['f90001', 5.960464477539063e-8], ['f90400', 0.00006103515625], ['f9c400', -4], ['fbc010666666666666', -4.1],
    ['f97c00', Infinity], ['f97e00', NaN], ['f9fc00', -Infinity], ['fa7f800000', Infinity], ['f4', false], ['f5', true], ['f6', null],
    ['60', ''], ['6161', 'a'], ['6449455446', 'IETF'], ['62225c', '"\\'], ['62c3bc', 'ü'], ['63e6b0b4', '水'],
    ['80', []], ['83010203', [1, 2, 3]], ['8301820203820405', [1, [2, 3], [4, 5]]],
    ['98190102030405060708090a0b0c0d0e0f101112131415161718181819', Array.from({ length: 25 }, (_, k) => k + 1)],
    ['a0', {}], ['a26161016162820203', { a: 1, b: [2, 3] }], ['826161a161626163', ['a', { b: 'c' }]],
    ['9fff', []], ['9f018202039f0405ffff', [1, [2, 3], [4, 5]]], ['83018202039f0405ff', [1, [2, 3], [4, 5]]],
    ['bf61610161629f0203ffff', { a: 1, b: [2, 3] }], ['7f657374726561646d696e67ff', 'streaming'],
  ])('%s reads as %o', (hex, value) => {
    expect(readCbor(bytes(hex))).toEqual(typeof value === 'object' && value !== null && !Array.isArray(value) ? Object.assign(Object.create(null), value) : value)
  })

  test.each(['1bffffffffffffffff', 'c249010000000000000000', 'c074323031332d30332d32315432303a30343a30305a', '4401020304', 'a201020304', 'f0', 'f8ff'])(
    '%s, which no request needs, is refused', (hex) => {
      expect(() => readCbor(bytes(hex))).toThrow(CborError)
    },
  )
})

// RFC 8949, appendix F (from memory): examples of items that are not well-formed.
test.each([
  '18', '19', '1a', '1b', '1901', '1a0102', '38', '58', '98', '9a01ff00', 'b8', 'd8', 'f8', 'f900', 'fa0000', 'fb000000', '41', '61', '5affffffff00',
  '5f', '7f', '9f', '9f0102', 'bf', 'bf01020102', '819f', '9f8000', 'c0', '1c', '1d', '1e', '3c', '5c', '7d', '9e', 'bc', 'dd', 'fc', 'ff', '81ff', 'a1ff', 'bf00ff',
  '', '0000',
])('%s is not one well-formed item and is refused', (hex) => {
  expect(() => readCbor(bytes(hex))).toThrow(CborError)
})

describe('RFC 8746', () => {
  // Figures 1 and 2 of section 3.1.1 (from memory): the matrix [[2, 4, 8], [4, 16, 256]] with a typed and with a classical array.
  test.each(['d828 82 82 02 03 d841 4c 000200040008000400100100', 'd828 82 82 02 03 86 02 04 08 04 10 190100'])('%s is a matrix of 2 × 3', (hex) => {
    const matrix = readCbor(bytes(hex)) as ShapedArray

    expect(matrix).toBeInstanceOf(ShapedArray)
    expect(matrix.dimensions).toEqual([2, 3])
    expect(Array.from(matrix.values)).toEqual([2, 4, 8, 4, 16, 256])
  })

  // Section 2.1: the tag is 0b010_f_s_e_ll. The same numbers in each kind, by JavaScript's own DataView.
  test.each<[number, number, (view: DataView, at: number, value: number) => void]>([
    [64, 1, (v, at, x) => v.setUint8(at, x)], [65, 2, (v, at, x) => v.setUint16(at, x)], [66, 4, (v, at, x) => v.setUint32(at, x)],
    [67, 8, (v, at, x) => v.setBigUint64(at, BigInt(x))], [68, 1, (v, at, x) => v.setUint8(at, x)], [69, 2, (v, at, x) => v.setUint16(at, x, true)],
    [70, 4, (v, at, x) => v.setUint32(at, x, true)], [71, 8, (v, at, x) => v.setBigUint64(at, BigInt(x), true)], [72, 1, (v, at, x) => v.setInt8(at, x)],
    [73, 2, (v, at, x) => v.setInt16(at, x)], [74, 4, (v, at, x) => v.setInt32(at, x)], [75, 8, (v, at, x) => v.setBigInt64(at, BigInt(x))],
    [77, 2, (v, at, x) => v.setInt16(at, x, true)], [78, 4, (v, at, x) => v.setInt32(at, x, true)], [79, 8, (v, at, x) => v.setBigInt64(at, BigInt(x), true)],
    [81, 4, (v, at, x) => v.setFloat32(at, x)], [82, 8, (v, at, x) => v.setFloat64(at, x)],
    [85, 4, (v, at, x) => v.setFloat32(at, x, true)], [86, 8, (v, at, x) => v.setFloat64(at, x, true)],
  ])('typed arrays of tag %i are read', (tag, width, set) => {
    const isSigned = tag >= 72
    const numbers = isSigned ? [0, 1, -2, 100, -128] : [0, 1, 2, 100, 255]
    const content = Buffer.alloc(numbers.length * width)
    const view = new DataView(content.buffer, content.byteOffset, content.length)
    numbers.forEach((value, k) => set(view, k * width, value))

    const read = readCbor(Buffer.concat([Buffer.from([0xd8, tag, 0x58, content.length]), content]))

    expect(Array.from(read as Float64Array)).toEqual(numbers)
  })

  test.each([[80, '3c00c000'], [84, '003c00c0']])('half-precision arrays of tag %i are read', (tag, hex) => {
    expect(Array.from(readCbor(Buffer.concat([Buffer.from([0xd8, tag, 0x44]), bytes(hex)])) as Float64Array)).toEqual([1, -2])
  })

  test.each(['d84c 41 00', 'd853 50 00000000000000000000000000000000', 'd855 43 000000', 'd855 83 010203', 'd828 82 82 02 02 83 010203', 'd828 01', 'd90410 82 82 02 02 84 01020304'])(
    '%s is refused: reserved, too wide, cut short, no byte string, other dimensions, column-major', (hex) => {
      expect(() => readCbor(bytes(hex))).toThrow(CborError)
    },
  )
})

test('what the general-purpose library cborg writes is read as the same', () => {
  const value = { position: [[0.1, -2, 3e10], [1, 2, 3]], text: 'Gelenk 1 · größer', flag: true, nothing: null, big: 2 ** 40, deep: [[[[1]]]] }

  expect(JSON.parse(JSON.stringify(readCbor(encode(value))))).toEqual(value)
})

test('what is written is read by cborg as the same, typed arrays as binary32', () => {
  const value = { model: 'x', version: 3, unit: ['N·m'], many: 70000, less: -5, tenth: 0.1, nothing: null, list: [[1, 2]], torque: new ShapedArray([2, 2], Float32Array.of(1, 0.1, -3, 4)) }
  const shaped = ([dimensions, values]: [number[], Uint8Array]) => ({ dimensions, values })
  const floats = (content: Uint8Array) => Array.from(new Float32Array(content.slice().buffer))
  const tags: any[] = []
  tags[40] = (read: any) => (typeof read === 'function' ? shaped(read()) : shaped(read))
  tags[85] = (read: any) => (typeof read === 'function' ? floats(read()) : floats(read))

  const read = decode(writeCbor(value), { tags })

  expect(read).toEqual({ ...value, torque: { dimensions: [2, 2], values: [1, Math.fround(0.1), -3, 4] } })
})

test('a thousand levels of nesting are refused, not followed', () => {
  expect(() => readCbor(Buffer.alloc(1000, 0x81))).toThrow(/levels of nesting/)
})

/**
 * CBOR (RFC 8949) with typed arrays (RFC 8746): what controller code sends to the hot routes. Read here rather than by a
 * general library because a matrix must not become one JavaScript object per number on the way in.
 */

/** A row-major array of two or more dimensions (tag 40). */
export class ShapedArray {
  readonly dimensions: readonly number[]
  readonly values: ArrayLike<unknown>

  constructor(dimensions: readonly number[], values: ArrayLike<unknown>) {
    this.dimensions = dimensions
    this.values = values
  }
}

/** A matrix that came as an array of rows of equal length. */
export class RowMatrix extends ShapedArray {
  row(index: number): Float64Array {
    const [, columns] = this.dimensions
    return (this.values as Float64Array).subarray(index * columns, (index + 1) * columns)
  }
}

/** The body is no CBOR, or uses what this reader does not take. `message` says what and at which byte. */
export class CborError extends Error {}

/** Requests nest four deep; more is a mistake or an attack. */
const deepest = 16

/**
 * Reads one data item that fills the bytes.
 *
 * Maps become objects without a prototype, arrays and typed arrays lists of numbers, null and undefined null. Typed arrays of
 * binary32 in little endian become `Float32Array`, others `Float64Array`; either may be a view into `bytes`. Indefinite lengths
 * are taken. Byte strings, big numbers and other tags are refused, as are map keys that are no text or come twice.
 *
 * @throws {CborError}
 */
export function readCbor(bytes: Uint8Array): unknown {
  const reader = new Reader(bytes)
  const value = reader.item(0)
  if (reader.at !== bytes.length) throw new CborError(`${bytes.length - reader.at} bytes follow the data item that ends at byte ${reader.at}`)
  return value
}

const utf8 = new TextDecoder('utf-8', { fatal: true })
const stop = Symbol('stop')
const indefinite = -1

class Reader {
  readonly #bytes: Uint8Array
  readonly #view: DataView
  at = 0

  constructor(bytes: Uint8Array) {
    this.#bytes = bytes
    this.#view = new DataView(bytes.buffer, bytes.byteOffset, bytes.byteLength)
  }

  item(depth: number, stopAllowed = false): unknown {
    if (depth > deepest) throw new CborError(`More than ${deepest} levels of nesting at byte ${this.at}`)
    const start = this.at
    this.#need(1)
    const first = this.#bytes[this.at++]
    const major = first >> 5
    const detail = first & 31
    switch (major) {
      case 0: return this.#argument(detail, start)
      case 1: return -1 - this.#argument(detail, start)
      case 2: throw new CborError(`A byte string stands at byte ${start}; numbers come as arrays or typed arrays`)
      case 3: return this.#text(this.#length(detail, start), start)
      case 4: return this.#array(this.#length(detail, start), depth)
      case 5: return this.#map(this.#length(detail, start), depth)
      case 6: return this.#tagged(this.#argument(detail, start), start, depth)
      default: return this.#simple(detail, start, stopAllowed)
    }
  }

  #need(count: number): void {
    if (this.at + count > this.#bytes.length) {
      throw new CborError(`The body ends at byte ${this.#bytes.length}, in the middle of a data item`)
    }
  }

  #argument(detail: number, start: number): number {
    if (detail < 24) return detail
    if (detail > 27) throw new CborError(`Byte ${start} is no valid start of a data item`)
    const width = 1 << (detail - 24)
    this.#need(width)
    const at = this.at
    this.at += width
    if (width === 1) return this.#bytes[at]
    if (width === 2) return this.#view.getUint16(at)
    if (width === 4) return this.#view.getUint32(at)
    const value = this.#view.getUint32(at) * 2 ** 32 + this.#view.getUint32(at + 4)
    if (!Number.isSafeInteger(value)) throw new CborError(`The integer at byte ${start} is beyond 2^53`)
    return value
  }

  #length(detail: number, start: number): number {
    return detail === 31 ? indefinite : this.#argument(detail, start)
  }

  #text(length: number, start: number): string {
    if (length === indefinite) {
      let text = ''
      for (;;) {
        this.#need(1)
        const first = this.#bytes[this.at++]
        if (first === 0xff) return text
        if (first >> 5 !== 3 || (first & 31) === 31) throw new CborError(`The text at byte ${start} has a part that is no text`)
        text += this.#text(this.#argument(first & 31, this.at - 1), start)
      }
    }
    this.#need(length)
    const from = this.at
    this.at += length
    // Keys and joint names are short and nearly always ASCII: the decoder's own overhead is several times the work.
    if (length <= 24) {
      let text = ''
      let k = from
      for (; k < this.at && this.#bytes[k] < 128; k++) text += String.fromCharCode(this.#bytes[k])
      if (k === this.at) return text
    }
    try {
      return utf8.decode(this.#bytes.subarray(from, this.at))
    } catch (cause) {
      throw new CborError(`The text at byte ${start} is no UTF-8`, { cause })
    }
  }

  #array(length: number, depth: number): unknown[] {
    const list: unknown[] = []
    if (length === indefinite) {
      for (;;) {
        const value = this.item(depth + 1, true)
        if (value === stop) return list
        list.push(value)
      }
    }
    this.#need(length)
    for (let k = 0; k < length; k++) list.push(this.item(depth + 1))
    return list
  }

  #map(length: number, depth: number): Record<string, unknown> {
    const map: Record<string, unknown> = Object.create(null)
    if (length !== indefinite) this.#need(2 * length)
    for (let k = 0; length === indefinite || k < length; k++) {
      const start = this.at
      const key = this.item(depth + 1, length === indefinite)
      if (key === stop) break
      if (typeof key !== 'string') throw new CborError(`The key at byte ${start} is no text`)
      if (key in map) throw new CborError(`The key "${key.slice(0, 40)}" at byte ${start} comes twice`)
      map[key] = this.item(depth + 1)
    }
    return map
  }

  #simple(detail: number, start: number, stopAllowed: boolean): unknown {
    switch (detail) {
      case 20: return false
      case 21: return true
      case 22: case 23: return null
      case 25: return halfFloat(this.#view, this.#skip(2), false)
      case 26: return this.#view.getFloat32(this.#skip(4))
      case 27: return this.#view.getFloat64(this.#skip(8))
      case 31: if (stopAllowed) return stop
    }
    throw new CborError(`Byte ${start} is no value that this service knows`)
  }

  #skip(width: number): number {
    this.#need(width)
    this.at += width
    return this.at - width
  }

  #tagged(tag: number, start: number, depth: number): unknown {
    if (tag >= 64 && tag <= 87) return this.#typedArray(tag, start)
    if (tag === 40) return this.#shaped(start, depth)
    if (tag === 41) return this.item(depth + 1) // homogeneous array: as an array
    if (tag === 55799) return this.item(depth + 1) // self-described CBOR (RFC 8949, section 3.4.6)
    throw new CborError(`Tag ${tag} at byte ${start} is not taken here; typed arrays (64 to 86), 40 and 41 are`)
  }

  #shaped(start: number, depth: number): ShapedArray {
    const pair = this.item(depth + 1)
    const [dimensions, values] = Array.isArray(pair) && pair.length === 2 ? pair : []
    const lengths = isList(dimensions) ? Array.from(dimensions) : []
    if (lengths.length < 1 || !lengths.every((length) => Number.isSafeInteger(length) && (length as number) > 0) || !isList(values)) {
      throw new CborError(`Tag 40 at byte ${start} wants two arrays, the dimensions and the values`)
    }
    if (lengths.reduce<number>((product, length) => product * (length as number), 1) !== values.length) {
      throw new CborError(`The array at byte ${start} has ${values.length} values, its dimensions are ${lengths.join(' × ')}`)
    }
    return new ShapedArray(lengths as number[], values)
  }

  /** RFC 8746, section 2.1: the tag is 0b010_f_s_e_ll. */
  #typedArray(tag: number, start: number): Float32Array | Float64Array {
    const kind = elementKinds[tag - 64]
    if (kind === null) throw new CborError(`Typed arrays of tag ${tag}, at byte ${start}, are not taken`)
    this.#need(1)
    const first = this.#bytes[this.at++]
    if (first >> 5 !== 2 || (first & 31) === 31) throw new CborError(`Tag ${tag} at byte ${start} wants a byte string of definite length`)
    const length = this.#argument(first & 31, start)
    if (length % kind.width !== 0) throw new CborError(`The typed array at byte ${start} has ${length} bytes, no multiple of ${kind.width}`)
    return kind.read(this.#view, this.#skip(length), length / kind.width)
  }
}

/** Whether a value read from CBOR or JSON is a list: an array or a typed array. */
export function isList(value: unknown): value is ArrayLike<unknown> {
  return Array.isArray(value) || value instanceof Float64Array || value instanceof Float32Array
}

interface ElementKind {
  readonly width: number
  read(view: DataView, from: number, count: number): Float32Array | Float64Array
}

function elements(width: number, get: (view: DataView, at: number) => number): ElementKind {
  return {
    width,
    read(view, from, count) {
      const values = new Float64Array(count)
      for (let k = 0; k < count; k++) values[k] = get(view, from + k * width)
      return values
    },
  }
}

/** binary32 and binary64, little endian, are what machines send: read where they lie, or, off their alignment, from a copy. */
function viewed(Numbers: typeof Float32Array | typeof Float64Array, slow: ElementKind): ElementKind {
  const { width } = slow
  return {
    width,
    read(view, from, count) {
      if (!littleEndian) return slow.read(view, from, count)
      const buffer = view.buffer as ArrayBuffer
      const at = view.byteOffset + from
      return at % width === 0 ? new Numbers(buffer, at, count) : new Numbers(buffer.slice(at, at + count * width))
    },
  }
}

const littleEndian = new Uint8Array(Uint16Array.of(1).buffer)[0] === 1

function wide(high: number, low: number): number {
  return high * 2 ** 32 + low
}

const elementKinds: readonly (ElementKind | null)[] = [
  elements(1, (v, at) => v.getUint8(at)),
  elements(2, (v, at) => v.getUint16(at)),
  elements(4, (v, at) => v.getUint32(at)),
  elements(8, (v, at) => wide(v.getUint32(at), v.getUint32(at + 4))),
  elements(1, (v, at) => v.getUint8(at)),
  elements(2, (v, at) => v.getUint16(at, true)),
  elements(4, (v, at) => v.getUint32(at, true)),
  elements(8, (v, at) => wide(v.getUint32(at + 4, true), v.getUint32(at, true))),
  elements(1, (v, at) => v.getInt8(at)),
  elements(2, (v, at) => v.getInt16(at)),
  elements(4, (v, at) => v.getInt32(at)),
  elements(8, (v, at) => wide(v.getInt32(at), v.getUint32(at + 4))),
  null, // 76 is reserved
  elements(2, (v, at) => v.getInt16(at, true)),
  elements(4, (v, at) => v.getInt32(at, true)),
  elements(8, (v, at) => wide(v.getInt32(at + 4, true), v.getUint32(at, true))),
  elements(2, (v, at) => halfFloat(v, at, false)),
  elements(4, (v, at) => v.getFloat32(at)),
  elements(8, (v, at) => v.getFloat64(at)),
  null, // binary128
  elements(2, (v, at) => halfFloat(v, at, true)),
  viewed(Float32Array, elements(4, (v, at) => v.getFloat32(at, true))),
  viewed(Float64Array, elements(8, (v, at) => v.getFloat64(at, true))),
  null, // binary128
]

/** IEEE 754 binary16; RFC 8949, appendix D. */
function halfFloat(view: DataView, at: number, little: boolean): number {
  const half = view.getUint16(at, little)
  const exponent = (half >> 10) & 31
  const fraction = half & 1023
  const size = exponent === 0 ? fraction * 2 ** -24
    : exponent === 31 ? (fraction === 0 ? Infinity : NaN)
    : (1024 + fraction) * 2 ** (exponent - 25)
  return half & 0x8000 ? -size : size
}

import { ShapedArray } from './cbor-reader.ts'

const littleEndian = new Uint8Array(Uint16Array.of(1).buffer)[0] === 1

/**
 * Writes a value as CBOR (RFC 8949). Arrays, objects, texts, booleans and null as their CBOR namesakes, whole numbers as
 * integers, others as binary64. A `Float32Array` becomes a typed array of binary32, little endian (RFC 8746, tag 85), a
 * ShapedArray tag 40 of its dimensions and values.
 */
export function writeCbor(value: unknown): Buffer {
  const writer = new CborWriter()
  writer.item(value)
  return writer.written()
}

/** Writes one data item, or the parts of one, after the other. One writer serves one answer at a time and is used again. */
export class CborWriter {
  #bytes: Buffer
  #at = 0

  constructor(room = 1024) {
    this.#bytes = Buffer.allocUnsafe(room)
  }

  /** Forgets what was written. */
  clear(): void {
    this.#at = 0
  }

  /** What was written: a view that the next answer overwrites. */
  written(): Buffer {
    return this.#bytes.subarray(0, this.#at)
  }

  /** What was written, one Latin-1 character per byte. */
  take(): string {
    return this.#bytes.toString('latin1', 0, this.#at)
  }

  /** CBOR as it stands. */
  raw(bytes: Uint8Array): void {
    this.#reserve(bytes.length)
    this.#bytes.set(bytes, this.#at)
    this.#at += bytes.length
  }

  /** The beginning of a map of so many keys with their values. */
  map(count: number): void {
    this.#head(5, count)
  }

  /** The beginning of an array of so many items. */
  array(count: number): void {
    this.#head(4, count)
  }

  item(value: unknown): void {
    if (typeof value === 'number') this.#number(value)
    else if (typeof value === 'string') this.#text(value)
    else if (value === null || value === undefined) this.#byte(0xf6)
    else if (typeof value === 'boolean') this.#byte(value ? 0xf5 : 0xf4)
    else if (value instanceof Float32Array) this.#typedArray(value)
    else if (value instanceof ShapedArray) this.#shaped(value)
    else if (Array.isArray(value)) {
      this.array(value.length)
      for (const entry of value) this.item(entry)
    } else this.#map(value as object)
  }

  #map(value: object): void {
    const entries = Object.entries(value).filter(([, entry]) => entry !== undefined)
    this.map(entries.length)
    for (const [key, entry] of entries) {
      this.#text(key)
      this.item(entry)
    }
  }

  #shaped({ dimensions, values }: ShapedArray): void {
    this.#head(6, 40)
    this.array(2)
    this.item(dimensions)
    this.item(values)
  }

  #typedArray(values: Float32Array): void {
    this.#head(6, 85)
    this.#head(2, 4 * values.length)
    this.#reserve(4 * values.length)
    if (littleEndian) {
      this.#bytes.set(new Uint8Array(values.buffer, values.byteOffset, values.byteLength), this.#at)
      this.#at += values.byteLength
    } else for (let k = 0; k < values.length; k++) this.#at = this.#bytes.writeFloatLE(values[k], this.#at)
  }

  #number(value: number): void {
    if (Number.isSafeInteger(value) && !Object.is(value, -0)) {
      if (value >= 0) this.#head(0, value)
      else this.#head(1, -1 - value)
      return
    }
    this.#reserve(9)
    this.#bytes[this.#at] = 0xfb
    this.#at = this.#bytes.writeDoubleBE(value, this.#at + 1)
  }

  #text(text: string): void {
    const length = Buffer.byteLength(text)
    this.#head(3, length)
    this.#reserve(length)
    this.#at += this.#bytes.write(text, this.#at)
  }

  #head(major: number, argument: number): void {
    this.#reserve(9)
    const top = major << 5
    if (argument < 24) this.#bytes[this.#at++] = top | argument
    else if (argument < 256) this.#at = this.#bytes.writeUInt16BE(((top | 24) << 8) | argument, this.#at)
    else if (argument < 65536) {
      this.#bytes[this.#at] = top | 25
      this.#at = this.#bytes.writeUInt16BE(argument, this.#at + 1)
    } else if (argument < 2 ** 32) {
      this.#bytes[this.#at] = top | 26
      this.#at = this.#bytes.writeUInt32BE(argument, this.#at + 1)
    } else {
      this.#bytes[this.#at] = top | 27
      this.#at = this.#bytes.writeUInt32BE(Math.floor(argument / 2 ** 32), this.#at + 1)
      this.#at = this.#bytes.writeUInt32BE(argument % 2 ** 32, this.#at)
    }
  }

  #byte(byte: number): void {
    this.#reserve(1)
    this.#bytes[this.#at++] = byte
  }

  #reserve(more: number): void {
    if (this.#at + more <= this.#bytes.length) return
    const grown = Buffer.allocUnsafe(Math.max(2 * this.#bytes.length, this.#at + more))
    this.#bytes.copy(grown, 0, 0, this.#at)
    this.#bytes = grown
  }
}

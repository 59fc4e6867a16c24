/** Little-endian bytes, appended one value after another. */
export class Bytes {
  #bytes = new Uint8Array(1024)
  #view = new DataView(this.#bytes.buffer)
  #length = 0

  uint32(value: number): void {
    const at = this.#room(4)
    this.#view.setUint32(at, value, true)
  }

  float64(value: number): void {
    const at = this.#room(8)
    this.#view.setFloat64(at, value, true)
  }

  float64s(values: Float64Array): void {
    for (let k = 0; k < values.length; k++) this.float64(values[k])
  }

  float32s(values: Float32Array): void {
    const at = this.#room(4 * values.length)
    for (let k = 0; k < values.length; k++) this.#view.setFloat32(at + 4 * k, values[k], true)
  }

  /** UTF-16 code units, so that any text comes back as it was. */
  text(value: string): void {
    this.uint32(value.length)
    const at = this.#room(2 * value.length)
    for (let k = 0; k < value.length; k++) this.#view.setUint16(at + 2 * k, value.charCodeAt(k), true)
  }

  finish(): Uint8Array {
    return this.#bytes.slice(0, this.#length)
  }

  /** Room for `count` bytes more. Replaces the view when it grows, so it is asked for first. */
  #room(count: number): number {
    const at = this.#length
    this.#length += count
    if (this.#length > this.#bytes.length) {
      const larger = new Uint8Array(Math.max(2 * this.#bytes.length, this.#length))
      larger.set(this.#bytes)
      this.#bytes = larger
      this.#view = new DataView(larger.buffer)
    }
    return at
  }
}

/** Reads what Bytes wrote, in the same order. @throws {RangeError} the bytes end before a value does */
export class ByteReader {
  readonly #view: DataView
  #at = 0

  constructor(bytes: Uint8Array) {
    this.#view = new DataView(bytes.buffer, bytes.byteOffset, bytes.byteLength)
  }

  get isAtEnd(): boolean {
    return this.#at === this.#view.byteLength
  }

  uint32(): number {
    this.#at += 4
    return this.#view.getUint32(this.#at - 4, true)
  }

  float64(): number {
    this.#at += 8
    return this.#view.getFloat64(this.#at - 8, true)
  }

  float64s(into: Float64Array): void {
    for (let k = 0; k < into.length; k++) into[k] = this.float64()
  }

  float32s(into: Float32Array): void {
    for (let k = 0; k < into.length; k++, this.#at += 4) into[k] = this.#view.getFloat32(this.#at, true)
  }

  text(): string {
    const length = this.uint32()
    let value = ''
    for (let k = 0; k < length; k++, this.#at += 2) value += String.fromCharCode(this.#view.getUint16(this.#at, true))
    return value
  }
}

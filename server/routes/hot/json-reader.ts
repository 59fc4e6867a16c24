import { RowMatrix } from './cbor-reader.ts'

/**
 * Reads the JSON that controllers send, an object of texts, numbers and matrices, several times as fast as JSON.parse and
 * without an object per row: numbers go from the bytes straight into typed arrays, read to the same binary64 as JSON.parse
 * reads.
 *
 * @returns the object, its matrices as RowMatrix; undefined for anything unusual, such as escapes, null, rows of unequal
 *   length or a mistake: then JSON.parse reads it, or says what is wrong with it
 */
export function readPlainJson(bytes: Uint8Array): Record<string, unknown> | undefined {
  const reader = new Reader(bytes)
  const body = reader.object()
  return body !== undefined && reader.isAtEnd() ? body : undefined
}

/** The numbers of the body being read; grows, and is used again. */
let scratch = new Float64Array(8192)

/** 1e0 to 1e22: the powers of ten that binary64 holds exactly. */
const powers = Float64Array.from({ length: 23 }, (_, k) => Number(`1e${k}`))

/** After so many numbers that only the engine can read, going on would be slower than leaving it all to the engine. */
const mostHard = 64

const quote = 34, comma = 44, minus = 45, point = 46, zero = 48, colon = 58, opening = 91, closing = 93, open = 123, close = 125
const small = 0x20 // makes a letter a small one

class Reader {
  readonly #bytes: Uint8Array
  #at = 0
  #count = 0
  #hard = 0
  /** Matrices whose numbers still lie in scratch. */
  readonly #matrices: { body: Record<string, unknown>; key: string; from: number; rows: number; columns: number }[] = []

  constructor(bytes: Uint8Array) {
    this.#bytes = bytes
  }

  isAtEnd(): boolean {
    this.#skip()
    return this.#at === this.#bytes.length
  }

  object(): Record<string, unknown> | undefined {
    const bytes = this.#bytes
    const body: Record<string, unknown> = Object.create(null)
    this.#skip()
    if (bytes[this.#at++] !== open) return undefined
    for (;;) {
      this.#skip()
      const key = this.#text()
      // Said twice, the last one counts for JSON.parse: leave that to it.
      if (key === undefined || key in body) return undefined
      this.#skip()
      if (bytes[this.#at++] !== colon) return undefined
      this.#skip()
      if (!this.#value(body, key)) return undefined
      this.#skip()
      const next = bytes[this.#at++]
      if (next === close) break
      if (next !== comma) return undefined
    }
    // One block for all of a request: it lives for as long as the request does.
    const numbers = scratch.slice(0, this.#count)
    for (const { body: of, key, from, rows, columns } of this.#matrices) of[key] = new RowMatrix([rows, columns], numbers.subarray(from, from + rows * columns))
    return body
  }

  #value(body: Record<string, unknown>, key: string): boolean {
    const first = this.#bytes[this.#at]
    if (first === quote) return (body[key] = this.#text()) !== undefined
    if (first !== opening) {
      const value = this.#number()
      body[key] = value
      return value === value
    }
    this.#at++
    this.#skip()
    const inner = this.#bytes[this.#at]
    if (inner === opening) return this.#matrix(body, key)
    if (inner === quote) return (body[key] = this.#texts()) !== undefined
    const from = this.#count
    if (!this.#row()) return false
    body[key] = Array.from(scratch.subarray(from, this.#count))
    this.#count = from
    return true
  }

  #matrix(body: Record<string, unknown>, key: string): boolean {
    const bytes = this.#bytes
    const from = this.#count
    // Its place among the keys is now; its numbers follow when all are read.
    body[key] = null
    let rows = 0
    let columns = 0
    for (;;) {
      this.#skip()
      if (bytes[this.#at++] !== opening) return false
      const before = this.#count
      if (!this.#row()) return false
      if (rows++ === 0) columns = this.#count - before
      else if (this.#count - before !== columns) return false
      this.#skip()
      const next = bytes[this.#at++]
      if (next === closing) break
      if (next !== comma) return false
    }
    this.#matrices.push({ body, key, from, rows, columns })
    return true
  }

  /** Numbers up to the closing bracket, its opening one read already; at least one. */
  #row(): boolean {
    const bytes = this.#bytes
    let count = this.#count
    for (;;) {
      if (bytes[this.#at] <= 32) this.#skip()
      const value = this.#number()
      if (value !== value) return false
      if (count === scratch.length) {
        const grown = new Float64Array(2 * scratch.length)
        grown.set(scratch)
        scratch = grown
      }
      scratch[count++] = value
      if (bytes[this.#at] <= 32) this.#skip()
      const next = bytes[this.#at++]
      if (next === comma) continue
      this.#count = count
      return next === closing
    }
  }

  #texts(): string[] | undefined {
    const texts: string[] = []
    for (;;) {
      this.#skip()
      const text = this.#text()
      if (text === undefined) return undefined
      texts.push(text)
      this.#skip()
      const next = this.#bytes[this.#at++]
      if (next === closing) return texts
      if (next !== comma) return undefined
    }
  }

  /** A text of plain ASCII. */
  #text(): string | undefined {
    const bytes = this.#bytes
    if (bytes[this.#at++] !== quote) return undefined
    let text = ''
    for (;;) {
      const byte = bytes[this.#at++]
      if (byte === quote) return text
      if (!(byte >= 32 && byte < 127) || byte === 92 || text.length > 200) return undefined
      text += String.fromCharCode(byte)
    }
  }

  #skip(): void {
    const bytes = this.#bytes
    for (let byte = bytes[this.#at]; byte === 32 || byte === 10 || byte === 13 || byte === 9; byte = bytes[++this.#at]);
  }

  /** A number of JSON's grammar (RFC 8259, section 6); NaN: there is none. */
  #number(): number {
    const bytes = this.#bytes
    const start = this.#at
    let at = start
    const isNegative = bytes[at] === minus
    if (isNegative) at++
    // Up to nine significant digits, then up to nine more: whole numbers of 32 bits, which engines are quickest with.
    let head = 0
    let headDigits = 0
    let tail = 0
    let tailDigits = 0
    let exponent = 0
    let byte = bytes[at]
    if (byte === zero) {
      byte = bytes[++at]
      if (byte >= zero && byte <= 57) return NaN
    } else {
      if (!(byte > zero && byte <= 57)) return NaN
      for (; byte >= zero && byte <= 57 && headDigits < 9; byte = bytes[++at], headDigits++) head = (10 * head + (byte - zero)) | 0
      for (; byte >= zero && byte <= 57; byte = bytes[++at]) {
        if (tailDigits++ < 9) tail = (10 * tail + (byte - zero)) | 0
      }
    }
    if (byte === point) {
      const from = ++at
      byte = bytes[at]
      if (headDigits === 0) while (byte === zero) byte = bytes[++at]
      for (; byte >= zero && byte <= 57 && headDigits < 9; byte = bytes[++at], headDigits++) head = (10 * head + (byte - zero)) | 0
      for (; byte >= zero && byte <= 57; byte = bytes[++at]) {
        if (tailDigits++ < 9) tail = (10 * tail + (byte - zero)) | 0
      }
      if (at === from) return NaN
      exponent = from - at
    }
    if ((byte | small) === 101) {
      const sign = bytes[++at]
      if (sign === minus || sign === 43) at++
      let stated = 0
      const from = at
      for (byte = bytes[at]; byte >= zero && byte <= 57; byte = bytes[++at]) if (stated < 10_000) stated = 10 * stated + (byte - zero)
      if (at === from) return NaN
      exponent += sign === minus ? -stated : stated
    }
    this.#at = at
    let size: number
    if (head === 0) size = 0
    else if (exponent > 0 || exponent < -22 || tailDigits > 9) size = NaN
    else if (tailDigits === 0) size = head / powers[-exponent]
    else if (tailDigits <= 6) size = (head * powers[tailDigits] + tail) / powers[-exponent]
    else size = divided(head, tail, tailDigits, exponent)
    if (size !== size) {
      if (++this.#hard > mostHard) return NaN
      size = Number(Buffer.from(bytes.buffer, bytes.byteOffset + start + (isNegative ? 1 : 0), at - start - (isNegative ? 1 : 0)).toString('latin1'))
    }
    return isNegative ? -size : size
  }
}

/** Veltkamp's constant, 2^27 + 1: splits a binary64 number into two halves. */
const splitter = 134217729

/**
 * (head · 10^tailDigits + tail) · 10^exponent, head and tail below 10^9, correctly rounded; NaN where that cannot be told from
 * the next number. The numerator is held exactly as a sum of two doubles, and the quotient corrected by its remainder.
 * Source: Dekker, A floating-point technique for extending the available precision, Numerische Mathematik 18 (1971).
 */
function divided(head: number, tail: number, tailDigits: number, exponent: number): number {
  const power = powers[tailDigits]
  const divisor = powers[-exponent]
  const lowHalf = head & 32767
  const a = (head - lowHalf) * power
  const b = lowHalf * power + tail
  const high = a + b
  const low = a >= b ? b - (high - a) : a - (high - b)
  const quotient = high / divisor
  const t = splitter * quotient
  const q1 = t - (t - quotient)
  const q2 = quotient - q1
  const u = splitter * divisor
  const d1 = u - (u - divisor)
  const d2 = divisor - d1
  const product = quotient * divisor
  const error = q1 * d1 - product + q1 * d2 + q2 * d1 + q2 * d2
  const correction = (high - product - error + low) / divisor
  const above = quotient + correction * (1 + 1e-13)
  return above === quotient + correction * (1 - 1e-13) ? above : NaN
}

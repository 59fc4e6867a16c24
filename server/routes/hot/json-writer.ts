/** Significant digits of a number in an answer, and the integers that have exactly so many. */
const digits = 6
const least = 10 ** (digits - 1)
const beyond = 10 ** digits

/** 1e0 to 1e22: the powers of ten that binary64 holds exactly. */
const powers = Float64Array.from({ length: 23 }, (_, k) => Number(`1e${k}`))

/** ASCII of 000 to 999. */
const triples = new Uint8Array(3000)
for (let k = 0; k < 1000; k++) for (let d = 0; d < 3; d++) triples[3 * k + d] = String(k).padStart(3, '0').charCodeAt(d)

const zero = 48
const minus = 45
const point = 46
const comma = 44
const opening = 91
const closing = 93

/** The longest text that number() writes: sign, "0.00001", six digits, and room for an exponent. */
const longestNumber = 32

/**
 * Writes answers as JSON bytes, numbers with 6 significant digits. One writer serves one answer at a time and is used again,
 * so that an answer of thousands of numbers makes no garbage.
 */
export class JsonWriter {
  #bytes: Uint8Array
  #view: Buffer
  #at = 0

  constructor(room = 65536) {
    this.#bytes = new Uint8Array(room)
    this.#view = Buffer.from(this.#bytes.buffer)
  }

  /** Forgets what was written. */
  clear(): void {
    this.#at = 0
  }

  /** What was written, its UTF-8 bytes as one Latin-1 character each. */
  take(): string {
    return this.#view.toString('latin1', 0, this.#at)
  }

  /** JSON text as it stands. */
  raw(text: string): void {
    this.#reserve(3 * text.length)
    this.#at += this.#view.write(text, this.#at)
  }

  bytes(bytes: Uint8Array): void {
    this.#reserve(bytes.length)
    this.#bytes.set(bytes, this.#at)
    this.#at += bytes.length
  }

  /** A number to 6 significant digits, rounded as toPrecision does; null for one that is not finite. */
  number(value: number): void {
    this.#reserve(longestNumber)
    this.#at = writeNumber(this.#bytes, this.#at, value)
  }

  /** `[…]`, the first `count` of values. */
  numbers(values: ArrayLike<number>, count = values.length): void {
    this.#reserve(2 + count * (longestNumber + 1))
    this.#at = writeRow(this.#bytes, this.#at, values, 0, count, null)
  }

  /** `[[a,b],…]` of `count` pairs of whole numbers. */
  pairs(values: ArrayLike<number>, count: number): void {
    if (count === 0) return this.raw('[]')
    for (let k = 0; k < count; k++) this.raw(`${k === 0 ? '[' : ','}[${values[2 * k]},${values[2 * k + 1]}]`)
    this.raw(']')
  }

  /**
   * `[[…],…]` of a row-major matrix.
   *
   * @param order  column k of the answer is column order[k] of the matrix; null: as it stands
   */
  matrix(values: ArrayLike<number>, rows: number, columns: number, order: Int32Array | null): void {
    this.#reserve(2 + rows * (3 + columns * (longestNumber + 1)))
    const bytes = this.#bytes
    let at = this.#at
    bytes[at++] = opening
    for (let row = 0; row < rows; row++) {
      if (row > 0) bytes[at++] = comma
      at = writeRow(bytes, at, values, row * columns, columns, order)
    }
    bytes[at++] = closing
    this.#at = at
  }

  #reserve(more: number): void {
    if (this.#at + more <= this.#bytes.length) return
    const grown = new Uint8Array(Math.max(2 * this.#bytes.length, this.#at + more))
    grown.set(this.#bytes.subarray(0, this.#at))
    this.#bytes = grown
    this.#view = Buffer.from(grown.buffer)
  }
}

// The functions below write into bytes from `at` on and return where they stopped: their caller has made room.

function writeRow(
  bytes: Uint8Array, at: number, values: ArrayLike<number>, from: number, count: number, order: Int32Array | null,
): number {
  bytes[at++] = opening
  for (let k = 0; k < count; k++) {
    if (k > 0) bytes[at++] = comma
    at = writeNumber(bytes, at, values[from + (order === null ? k : order[k])])
  }
  bytes[at++] = closing
  return at
}

function writeNumber(bytes: Uint8Array, at: number, value: number): number {
  let size = value
  if (value < 0) {
    bytes[at++] = minus
    size = -value
  }
  // Outside this range JSON wants an exponent, or the power of ten below is not exact.
  if (!(size >= 1e-5 && size < 1e15)) return writeSlowly(bytes, at, size)
  let exponent = 0
  if (size >= 1) while (size >= powers[exponent + 1]) exponent++
  else do exponent--; while (size * powers[-exponent] < 1)
  const shift = digits - 1 - exponent
  const scaled = shift >= 0 ? size * powers[shift] : size / powers[-shift]
  let whole = scaled | 0
  const rest = scaled - whole
  // The product is off by at most one unit of its last place: only this close to a tie can that turn the rounding.
  if (rest > 0.499999 && rest < 0.500001) return writeSlowly(bytes, at, size)
  if (rest > 0.5) whole++
  if (whole >= beyond) {
    whole = least
    exponent++
  }
  return writeDecimal(bytes, at, whole, exponent)
}

/** Writes whole · 10^(exponent − 5) without an exponent and without trailing zeros. */
function writeDecimal(bytes: Uint8Array, at: number, whole: number, exponent: number): number {
  const front = (whole / 1000) | 0
  const high = 3 * front
  const low = 3 * (whole - 1000 * front)
  let before = exponent + 1
  if (before <= 0) {
    bytes[at++] = zero
    bytes[at++] = point
    for (; before < 0; before++) bytes[at++] = zero
  }
  // All six digits, those after the point one place further on.
  const gap = before > 0 ? 1 : 0
  bytes[at] = triples[high]
  bytes[at + 1 + (before <= 1 ? gap : 0)] = triples[high + 1]
  bytes[at + 2 + (before <= 2 ? gap : 0)] = triples[high + 2]
  bytes[at + 3 + (before <= 3 ? gap : 0)] = triples[low]
  bytes[at + 4 + (before <= 4 ? gap : 0)] = triples[low + 1]
  bytes[at + 5 + (before <= 5 ? gap : 0)] = triples[low + 2]
  if (before >= digits) {
    for (let k = digits; k < before; k++) bytes[at + k] = zero
    return at + before
  }
  let end = at + digits + gap
  if (gap === 1) bytes[at + before] = point
  const kept = at + before
  while (end > kept && bytes[end - 1] === zero) end--
  return gap === 1 && end === kept + 1 ? kept : end
}

function writeSlowly(bytes: Uint8Array, at: number, size: number): number {
  // A 6-digit decimal survives binary64, so this prints the digits that toPrecision rounded to.
  const text = Number.isFinite(size) ? String(Number(size.toPrecision(digits))) : 'null'
  if (text === 'null' && size === Infinity && bytes[at - 1] === minus) at--
  for (let k = 0; k < text.length; k++) bytes[at++] = text.charCodeAt(k)
  return at
}

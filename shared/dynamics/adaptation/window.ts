/** Seconds of the window over which small batches and excitation are judged. */
export const WINDOW_SECONDS = 1

// Times are differences of decimal fractions: a row exactly one second old must not count as younger by rounding.
const SLACK = 1e-6

/** Sums over the window. n joints. */
export interface WindowSums {
  /** Rows whose errors count. */
  rows: number
  /** Squared error of what was served and of the base version, base standard deviations, length n. */
  readonly served: Float64Array
  readonly base: Float64Array
  /** Rows whose motion counts. */
  movedRows: number
  /** Squared velocity in its base standard deviations, length n. */
  readonly motion: Float64Array
}

/**
 * The batches of the last second, kept as one line per batch in a ring. A state holds no lines, only the numbers of its
 * first and next line, so states that were prepared and discarded leave nothing behind.
 */
export class BatchWindow {
  readonly sums: WindowSums
  readonly #joints: number
  readonly #stride: number
  #lines: Float64Array
  #capacity = 32

  constructor(joints: number) {
    this.#joints = joints
    // time of the newest row, rows with errors, rows with motion, then three sums per joint
    this.#stride = 3 + 3 * joints
    this.#lines = new Float64Array(this.#capacity * this.#stride)
    this.sums = {
      rows: 0,
      served: new Float64Array(joints),
      base: new Float64Array(joints),
      movedRows: 0,
      motion: new Float64Array(joints),
    }
  }

  /**
   * Writes line `end`.
   *
   * @param oldest  the oldest line that any state still needs
   * @param errorRows  0 when the batch's errors are not to count
   */
  write(
    oldest: number,
    end: number,
    time: number,
    errorRows: number,
    served: Float64Array,
    base: Float64Array,
    movedRows: number,
    motion: Float64Array,
  ): void {
    if (end - oldest >= this.#capacity) this.#grow(oldest, end)
    const at = this.#placeOf(end)
    const lines = this.#lines
    lines[at] = time
    lines[at + 1] = errorRows
    lines[at + 2] = movedRows
    for (let j = 0; j < this.#joints; j++) {
      lines[at + 3 + j] = errorRows > 0 ? served[j] : 0
      lines[at + 3 + this.#joints + j] = errorRows > 0 ? base[j] : 0
      lines[at + 3 + 2 * this.#joints + j] = motion[j]
    }
  }

  /** Number of the first line from `start` on that is younger than a second at `now`. */
  firstYoung(start: number, end: number, now: number): number {
    while (start < end && this.#lines[this.#placeOf(start)] <= now - WINDOW_SECONDS + SLACK) start++
    return start
  }

  /** Whether a window that began at `since` holds a whole second at `now`. */
  isFull(since: number, now: number): boolean {
    return now - since >= WINDOW_SECONDS - SLACK
  }

  /**
   * Adds up lines start to end − 1, in their order, into `sums`.
   *
   * @param errorsFrom  the first line whose errors count
   */
  sum(start: number, end: number, errorsFrom: number): WindowSums {
    const { sums } = this
    sums.rows = 0
    sums.movedRows = 0
    sums.served.fill(0)
    sums.base.fill(0)
    sums.motion.fill(0)
    for (let line = start; line < end; line++) {
      const at = this.#placeOf(line)
      const counts = line >= errorsFrom
      if (counts) sums.rows += this.#lines[at + 1]
      sums.movedRows += this.#lines[at + 2]
      for (let j = 0; j < this.#joints; j++) {
        if (counts) sums.served[j] += this.#lines[at + 3 + j]
        if (counts) sums.base[j] += this.#lines[at + 3 + this.#joints + j]
        sums.motion[j] += this.#lines[at + 3 + 2 * this.#joints + j]
      }
    }
    return sums
  }

  /** Lines start to end − 1, for a checkpoint. */
  copy(start: number, end: number): Float64Array {
    const lines = new Float64Array((end - start) * this.#stride)
    for (let line = start; line < end; line++) {
      const at = this.#placeOf(line)
      lines.set(this.#lines.subarray(at, at + this.#stride), (line - start) * this.#stride)
    }
    return lines
  }

  /** Puts lines back that copy gave, from line 0 on, and answers how many. */
  restore(lines: Float64Array): number {
    const count = lines.length / this.#stride
    while (this.#capacity <= count) this.#capacity *= 2
    this.#lines = new Float64Array(this.#capacity * this.#stride)
    this.#lines.set(lines)
    return count
  }

  #placeOf(line: number): number {
    return (line % this.#capacity) * this.#stride
  }

  #grow(oldest: number, end: number): void {
    const kept = this.copy(oldest, end)
    this.#capacity *= 2
    this.#lines = new Float64Array(this.#capacity * this.#stride)
    for (let line = oldest; line < end; line++) {
      const from = (line - oldest) * this.#stride
      this.#lines.set(kept.subarray(from, from + this.#stride), this.#placeOf(line))
    }
  }
}

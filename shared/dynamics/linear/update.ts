/** What a linear scheme has learned at one moment. p = basis size, n joints, d = p + n. */
export interface LinearState {
  /** Length d: z, then b (base standard deviations at asOf). */
  readonly values: Float64Array
  /** d × d, row-major, symmetric to the bit: covariance of the values. Empty under first-order updates. */
  readonly covariance: Float64Array
  /** Running weighted squared innovation, 1 when all is as expected. */
  surprise: number
  /** Whether a declared event asks the next step to open the gate. */
  opening: boolean
  /** Time of the newest row it has seen, s; NaN before the first. */
  asOf: number
}

/** Rows with what the base and the basis say of them; arrays may be longer than the rows used. */
export interface LinearRows {
  /** s, rising strictly. */
  readonly time: Float64Array
  /** rows × 3n, normalised: what state-dependent weights see. */
  readonly x: Float64Array
  /** rows × n: measured torque less base(x), base standard deviations. */
  readonly residual: Float64Array
  /** rows × n × p: A(x). */
  readonly basis: Float64Array
}

/** How z and b are changed by what was measured: recursive, first-order, or a rival. */
export interface LinearUpdate {
  /** p. */
  readonly size: number
  /** n. */
  readonly joints: number
  /** κ, 1/s: the bias falls to e^−κ of itself within a second; ρ = e^−κ. */
  readonly decay: number
  /** Rows that make one step. */
  readonly rowsPerStep: number
  initial(): LinearState
  /** Makes `into` what `from` is. */
  copy(from: LinearState, into: LinearState): void
  /** Lets time pass up to `time` without a measurement: the bias fades, the covariance grows. Time never runs back. */
  letPass(state: LinearState, time: number): void
  /** One step on rows from..to, to > from; lets time pass up to the newest first. Allocates nothing. */
  step(state: LinearState, rows: LinearRows, from: number, to: number): void
  /** A declared grip or release: the next step takes nothing for granted about z. */
  open(state: LinearState): void
  /** Whether every number of a state is finite. */
  isFinite(state: LinearState): boolean
}

/** Steps on rows from..to in groups of rowsPerStep, in time order; the last one takes what is left. */
export function stepThrough(update: LinearUpdate, state: LinearState, rows: LinearRows, from: number, to: number): void {
  for (let start = from; start < to; start += update.rowsPerStep) {
    update.step(state, rows, start, Math.min(start + update.rowsPerStep, to))
  }
}

/** Adds A(x) z + ρ^age b to the base's prediction of rows, base standard deviations. age: s per row, null: 0. */
export function addLearned(
  values: Float64Array, size: number, joints: number, basis: Float64Array, share: Float64Array | null, rows: number,
  into: Float64Array,
): void {
  for (let row = 0, k = 0; row < rows; row++) {
    const left = share ? share[row] : 1
    for (let j = 0; j < joints; j++, k++) {
      let sum = left * values[size + j]
      for (let c = 0; c < size; c++) sum += basis[k * size + c] * values[c]
      into[k] += sum
    }
  }
}

import { exp } from '../elementary.ts'
import { checkLength, ShapeError } from '../shape-error.ts'
import type { LinearRows, LinearState, LinearUpdate } from './update.ts'

/** What meta-training learns for the recursive update. p = basis size, n joints; variances in squared units of z and b. */
export interface FilterConstants {
  readonly rowsPerStep: number
  /** κ, 1/s, from 0: the bias falls to e^−κ of itself within a second. */
  readonly decay: number
  /** Lower triangle, row by row, of L with P0 = L Lᵀ: covariance of z before anything is measured; p (p + 1) / 2 values. */
  readonly initialFactor: readonly number[]
  /** Variance of b before anything is measured, length n. */
  readonly initialBias: readonly number[]
  /** Process noise of z per second, length p, and of b, length n. */
  readonly driftOfState: readonly number[]
  readonly driftOfBias: readonly number[]
  /** Variance of the residual per joint and row, length n. */
  readonly noise: readonly number[]
  /** Running mean squared innovation, in units of `noise`, above which the gate begins to open. */
  readonly threshold: number
  /** How far an open gate widens each state, as a share of its initial variance, length p. */
  readonly opening: readonly number[]
}

/** Weight of the newest batch in the running squared innovation. */
export const SURPRISE_SHARE = 0.4

/** A variance never grows beyond so many times its initial one. */
const mostGrowth = 100

/**
 * What a step did, for differentiating it: filled when given. Scalars are in the order in which rows and joints were taken in.
 */
export interface StepTrace {
  /** d × d covariance before the step and after time has passed and the gate has acted. */
  readonly before: Float64Array
  /** Values after time has passed. */
  readonly prior: Float64Array
  /** Per scalar d values P h, then its innovation variance S and innovation e. */
  readonly gains: Float64Array
  readonly variances: Float64Array
  readonly innovations: Float64Array
  surpriseBefore: number
  seconds: number
}

/** The recursive update, with a step that can leave a trace. */
export interface RecursiveUpdate extends LinearUpdate {
  step(state: LinearState, rows: LinearRows, from: number, to: number, trace?: StepTrace): void
}

/**
 * Recursive Gauss–Newton, which for a model linear in z and b is a Kalman filter on [z, b]. In a step b fades to the newest
 * row, process noise is added, a running squared innovation is brought up to date and opens z's covariance when high, and
 * every row and joint is taken in as one scalar in Joseph form.
 *
 * @throws {ShapeError} a length does not fit, or a variance is not a finite number in range
 * Source: Kalman 1960; Joseph form: Bucy and Joseph 1968 (both from memory).
 */
export function createRecursiveUpdate(constants: FilterConstants, size: number, joints: number): RecursiveUpdate {
  checkConstants(constants, size, joints)
  const d = size + joints
  const { decay, threshold, rowsPerStep } = constants
  const initialCovariance = initialOf(constants, size, joints)
  const openingScale = Float64Array.from(constants.opening, Math.sqrt)
  const drift = Float64Array.from([...constants.driftOfState, ...constants.driftOfBias])
  const noise = Float64Array.from(constants.noise)
  const most = Float64Array.from({ length: d }, (_, k) => mostGrowth * initialCovariance[k * d + k])
  const h = new Float64Array(d)
  const v = new Float64Array(d)
  const w = new Float64Array(d)

  function letPass(state: LinearState, time: number): number {
    const seconds = time > state.asOf ? time - state.asOf : 0
    if (!(time <= state.asOf)) state.asOf = time
    if (seconds === 0) return 0
    const { values, covariance } = state
    const left = decay === 0 ? 1 : exp(-decay * seconds)
    for (let k = size; k < d; k++) values[k] *= left
    for (let r = 0; r < d; r++) {
      for (let c = 0; c < r; c++) {
        const value = covariance[r * d + c] * (r < size ? 1 : c < size ? left : left * left)
        covariance[r * d + c] = value
        covariance[c * d + r] = value
      }
      covariance[r * d + r] = covariance[r * d + r] * (r < size ? 1 : left * left) + drift[r] * seconds
    }
    keepWithin(covariance, d, most)
    return seconds
  }

  /** Mean squared innovation of the rows before any of them is taken in, in units of noise. */
  function innovationOf({ values }: LinearState, { residual, basis }: LinearRows, from: number, to: number): number {
    let sum = 0
    for (let k = from * joints; k < to * joints; k++) {
      const j = k % joints
      let e = residual[k] - values[size + j]
      for (let c = 0; c < size; c++) e -= basis[k * size + c] * values[c]
      sum += (e * e) / noise[j]
    }
    return sum / ((to - from) * joints)
  }

  function widen(covariance: Float64Array, open: number): void {
    for (let r = 0; r < size; r++) {
      for (let c = 0; c <= r; c++) {
        const value = covariance[r * d + c] + open * openingScale[r] * openingScale[c] * initialCovariance[r * d + c]
        covariance[r * d + c] = value
        covariance[c * d + r] = value
      }
    }
  }

  function step(state: LinearState, rows: LinearRows, from: number, to: number, trace?: StepTrace): void {
    const { values, covariance } = state
    const { residual, basis } = rows
    if (trace) {
      trace.before.set(covariance)
      trace.surpriseBefore = state.surprise
    }
    const seconds = letPass(state, rows.time[to - 1])
    state.surprise = (1 - SURPRISE_SHARE) * state.surprise + SURPRISE_SHARE * innovationOf(state, rows, from, to)
    const open = state.opening ? 1 : state.surprise > threshold ? 1 - threshold / state.surprise : 0
    state.opening = false
    if (open > 0) widen(covariance, open)
    keepWithin(covariance, d, most)
    if (trace) {
      trace.prior.set(values)
      trace.seconds = seconds
    }
    for (let k = from * joints, scalar = 0; k < to * joints; k++, scalar++) {
      const j = k % joints
      for (let c = 0; c < size; c++) h[c] = basis[k * size + c]
      absorb(values, covariance, d, size, size + j, h, residual[k], noise[j], v, w, trace, scalar)
    }
  }

  return {
    size, joints, decay, rowsPerStep,
    initial: () => ({
      values: new Float64Array(d), covariance: initialCovariance.slice(), surprise: 0, opening: false, asOf: NaN,
    }),
    copy: copyState,
    letPass: (state, time) => void letPass(state, time),
    step,
    open: state => { state.opening = true },
    isFinite: isFiniteState,
  }
}

/**
 * Takes in one scalar y = Σ h[c] values[c] (c < size) + values[own] + noise, in Joseph form:
 * P ← (1 − k hᵀ) P (1 − k hᵀ)ᵀ + r k kᵀ.
 *
 * @param own  index of the bias in it; −1: none
 * @param v, w  work, length d; v = P h afterwards
 */
export function absorb(
  values: Float64Array, covariance: Float64Array, d: number, size: number, own: number, h: Float64Array, y: number, noise: number,
  v: Float64Array, w: Float64Array, trace?: StepTrace, scalar = 0,
): void {
  let e = y
  if (own >= 0) e -= values[own]
  for (let c = 0; c < size; c++) e -= h[c] * values[c]
  for (let r = 0; r < d; r++) {
    let sum = own >= 0 ? covariance[r * d + own] : 0
    for (let c = 0; c < size; c++) sum += covariance[r * d + c] * h[c]
    v[r] = sum
  }
  let s = noise
  if (own >= 0) s += v[own]
  for (let c = 0; c < size; c++) s += h[c] * v[c]
  if (trace) {
    trace.gains.set(v, scalar * d)
    trace.variances[scalar] = s
    trace.innovations[scalar] = e
  }
  // With B = P − k vᵀ: B h = v − k (hᵀv), and P ← B − (B h) kᵀ + r k kᵀ.
  const predicted = s - noise
  for (let r = 0; r < d; r++) w[r] = v[r] - (v[r] / s) * predicted
  for (let r = 0; r < d; r++) {
    const gain = v[r] / s
    for (let c = 0; c <= r; c++) {
      const other = v[c] / s
      const value = covariance[r * d + c] - gain * v[c] - w[r] * other + noise * gain * other
      covariance[r * d + c] = value
      covariance[c * d + r] = value
    }
    values[r] += gain * e
  }
}

/** Shrinks rows and columns whose variance has grown beyond its bound: correlations stay, so it stays positive definite. */
function keepWithin(covariance: Float64Array, d: number, most: Float64Array): void {
  for (let k = 0; k < d; k++) {
    const variance = covariance[k * d + k]
    if (!(variance > most[k])) continue
    const factor = Math.sqrt(most[k] / variance)
    for (let c = 0; c < d; c++) {
      covariance[k * d + c] *= factor
      covariance[c * d + k] = covariance[k * d + c]
    }
    covariance[k * d + k] = most[k]
  }
}

function initialOf({ initialFactor, initialBias }: FilterConstants, size: number, joints: number): Float64Array {
  const d = size + joints
  const covariance = new Float64Array(d * d)
  for (let r = 0; r < size; r++) {
    for (let c = 0; c <= r; c++) {
      let sum = 0
      for (let k = 0; k <= c; k++) sum += initialFactor[(r * (r + 1)) / 2 + k] * initialFactor[(c * (c + 1)) / 2 + k]
      covariance[r * d + c] = sum
      covariance[c * d + r] = sum
    }
  }
  for (let j = 0; j < joints; j++) covariance[(size + j) * d + size + j] = initialBias[j]
  return covariance
}

export function copyState(from: LinearState, into: LinearState): void {
  into.values.set(from.values)
  into.covariance.set(from.covariance)
  into.surprise = from.surprise
  into.opening = from.opening
  into.asOf = from.asOf
}

/** Whether values, variances and surprise are finite, and no variance is negative. */
export function isFiniteState({ values, covariance, surprise }: LinearState): boolean {
  let sum = surprise
  for (const value of values) sum += value
  for (const value of covariance) sum += value
  if (sum - sum !== 0) return false
  const d = values.length
  for (let k = 0; k < d && covariance.length > 0; k++) if (covariance[k * d + k] < 0) return false
  return true
}

/**
 * Refuses constants that do not fit p and n.
 *
 * @throws {ShapeError} names the part, what was found and what was expected
 */
export function checkConstants(constants: FilterConstants, size: number, joints: number): void {
  const lists: [string, readonly number[], number, number][] = [
    ['initialFactor', constants.initialFactor, (size * (size + 1)) / 2, -Infinity],
    ['initialBias', constants.initialBias, joints, 0],
    ['driftOfState', constants.driftOfState, size, 0],
    ['driftOfBias', constants.driftOfBias, joints, 0],
    ['noise', constants.noise, joints, Number.MIN_VALUE],
    ['opening', constants.opening, size, 0],
    ['decay', [constants.decay], 1, 0],
    ['threshold', [constants.threshold], 1, Number.MIN_VALUE],
    ['rowsPerStep', [constants.rowsPerStep], 1, 1],
  ]
  for (const [name, list, length, least] of lists) {
    checkLength(name, list.length, length, `${size} states, ${joints} joints`)
    list.forEach((value, k) => {
      if (!Number.isFinite(value) || value < least) {
        throw new ShapeError(`${name}: value ${k} is ${value}, expected a finite number from ${least}.`)
      }
    })
  }
}

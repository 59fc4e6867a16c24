import { exp } from '../elementary.ts'
import { createRandom } from '../random.ts'
import type { Random } from '../random.ts'
import { adam } from '../updates/adam.ts'
import type { Learnable, Tape } from './learnable.ts'
import type { LinearMotion } from './linear-motion.ts'
import { LAGS, meanErrors, measureLinear, periodOf, stepsOfLag } from './measure.ts'
import type { LinearErrors } from './measure.ts'
import type { LinearState, LinearUpdate } from './update.ts'

/** What the constants are learned for: the next batch, predictions that are stale, a state that is frozen, or all of them. */
export type Objective = 'next_batch' | 'stale' | 'frozen' | 'mixed'

export interface LinearMetaTrainingOptions {
  readonly objective: Objective
  /** Outer updates. */
  readonly updates: number
  /** K: steps of one chain. */
  readonly steps: number
  /** Motions adapted to side by side. */
  readonly streams: number
  readonly rowsPerStep: number
  /** Adam's rate on θ, falling to zero along a half cosine. */
  readonly outerRate: number
  /** Rows of the same motion, far away, that z alone has to explain at a chain's end. */
  readonly farRows: number
  readonly seed: number
}

export const defaultLinearMetaTrainingOptions: LinearMetaTrainingOptions = {
  objective: 'mixed', updates: 180, steps: 45, streams: 16, rowsPerStep: 4, outerRate: 2e-2, farRows: 32, seed: 1,
}

export interface LinearMetaTrainingProgress {
  /** From 1. */
  readonly update: number
  readonly updates: number
  /** The outer error: a sum of logarithms. */
  readonly outer: number
  /** The validation score, where this update was checked. */
  readonly validation?: number
}

export interface LinearMetaTrainingResult {
  /** θ that did best on the validation motions. */
  readonly theta: Float64Array
  readonly validation: LinearErrors
  /** The outer update it was found at; 0: the start. */
  readonly update: number
}

/** Updates between two looks at the validation motions. */
const checkEvery = 15

/** Longest outer gradient taken as it is. */
const gradientLimit = 3

/** Share of unloaded motions in the outer error, and among the streams where there are some. */
const unloadedShare = 0.25

/** Which terms of the outer error an objective has: one per lag, then far rows. */
const termsOf: Readonly<Record<Objective, readonly number[]>> = {
  next_batch: [1, 0, 0, 0],
  stale: [0, 1, 1, 0],
  frozen: [0, 0, 0, 1],
  mixed: [1, 1, 1, 1],
}

/**
 * Learns the constants of a linear update by differentiating through chains of steps: the outer error is the sum, over
 * lags of 0, 0.4 and 1 s, of the logarithm of the mean squared error predicted at that lag, plus that of z alone on far rows
 * of the same motion under the same payload. Loaded and unloaded motions have logarithms of their own, so that the small
 * errors of unloaded motions count. Streams carry their state from chain to chain. The θ that did best on the validation
 * motions is kept.
 *
 * A generator: deterministic for a seed, and nothing happens between two `next` calls.
 *
 * @param start  θ to start from
 * @throws {RangeError} no training or no validation motion, or none long enough for a chain
 * Source: bi-level optimisation by unrolling, Franceschi, Frasconi, Salzo, Grazzi, Pontil 2018 (from memory).
 */
export function* metaTrainLinear(
  learnable: Learnable, start: Float64Array, training: readonly LinearMotion[], validation: readonly LinearMotion[],
  options: LinearMetaTrainingOptions = defaultLinearMetaTrainingOptions,
): Generator<LinearMetaTrainingProgress, LinearMetaTrainingResult> {
  const { steps, rowsPerStep } = options
  const long = training.filter(({ rows }) => rows >= steps * rowsPerStep)
  if (validation.length === 0) {
    throw new RangeError('Meta-training needs at least one validation recording: constants are chosen on them.')
  }
  if (long.length === 0) throw new RangeError(`Meta-training needs a recording of at least ${steps * rowsPerStep} rows.`)
  const random = createRandom(options.seed)
  const theta = start.slice()
  const streams = createStreams(long, learnable.update(theta), options, random)
  const state = adam.initialState(theta.length)
  const gradient = new Float64Array(theta.length)
  let best = { theta: theta.slice(), ...judge(learnable.update(theta), validation, options.objective), update: 0 }

  for (let update = 1; update <= options.updates; update++) {
    const outer = outerGradient(learnable, theta, streams, options, random, gradient)
    if (Number.isFinite(outer) && gradient.every(Number.isFinite)) {
      shorten(gradient, gradientLimit)
      const rate = options.outerRate * 0.5 * (1 + Math.cos((Math.PI * (update - 1)) / options.updates))
      adam.step(theta, gradient, state, rate)
    }
    let score: number | undefined
    if (update % checkEvery === 0 || update === options.updates) {
      const judged = judge(learnable.update(theta), validation, options.objective)
      score = judged.score
      if (judged.score < best.score) best = { theta: theta.slice(), ...judged, update }
    }
    yield { update, updates: options.updates, outer, validation: score }
  }
  return { theta: best.theta, validation: best.errors, update: best.update }
}

/** The score that chooses among states of θ, on motions: the objective's terms with the frozen half for the far rows. */
export function judge(
  update: LinearUpdate, motions: readonly LinearMotion[], objective: Objective,
): { readonly score: number; readonly errors: LinearErrors } {
  const terms = termsOf[objective]
  const scoreOf = ({ nextBatch, stale04, stale1, frozen }: LinearErrors) =>
    [nextBatch, stale04, stale1, frozen].reduce((sum, error, k) => sum + (terms[k] > 0 ? terms[k] * Math.log(error) : 0), 0)
  const of = (unloaded: boolean) => motions
    .filter(motion => motion.unloaded === unloaded)
    .map(motion => measureLinear(update, motion))
  const loaded = of(false)
  const unloaded = of(true)
  let score = 0
  if (loaded.length > 0) score += scoreOf(meanErrors(loaded)) * (unloaded.length > 0 ? 1 - unloadedShare : 1)
  if (unloaded.length > 0) score += scoreOf(meanErrors(unloaded)) * (loaded.length > 0 ? unloadedShare : 1)
  return { score: Number.isNaN(score) ? Infinity : score, errors: meanErrors([...loaded, ...unloaded]) }
}

interface Stream {
  motion: LinearMotion
  row: number
  isFresh: boolean
  state: LinearState
  /** Values and times of the steps before the chain, newest last. */
  past: { values: Float64Array; asOf: number }[]
  restart(update: LinearUpdate): void
}

function createStreams(
  motions: readonly LinearMotion[], update: LinearUpdate,
  { streams: count, steps, rowsPerStep }: LinearMetaTrainingOptions, random: Random,
): Stream[] {
  const groups = [motions.filter(({ unloaded }) => !unloaded), motions.filter(({ unloaded }) => unloaded)]
  const unloadedStreams = groups[1].length === 0 ? 0 : groups[0].length === 0
    ? count
    : Math.max(1, Math.round(unloadedShare * count))
  return Array.from({ length: count }, (_, index) => {
    const own = groups[index < unloadedStreams ? 1 : 0]
    const stream: Stream = {
      motion: own[0], row: 0, isFresh: true, state: update.initial(), past: [],
      restart(now) {
        stream.motion = own[random.integer(own.length)]
        stream.row = 0
        stream.isFresh = true
        stream.past = []
        now.copy(now.initial(), stream.state)
      },
    }
    stream.restart(update)
    // Each begins somewhere else, or all would be at the start of a motion together.
    const chains = Math.floor(stream.motion.rows / (steps * rowsPerStep))
    if (chains > 1) stream.row = random.integer(chains) * steps * rowsPerStep
    return stream
  })
}

interface Chain {
  readonly stream: Stream
  readonly tape: Tape
  readonly first: LinearState
  readonly row: number
  readonly isFresh: boolean
  readonly lags: readonly number[]
  /** Rows for z alone; empty where none is known to be under the same payload. */
  readonly far: readonly number[]
}

/** Runs every stream one chain on. Writes the gradient of the outer error and returns the error. */
function outerGradient(
  learnable: Learnable, theta: Float64Array, streams: readonly Stream[], options: LinearMetaTrainingOptions, random: Random,
  gradient: Float64Array,
): number {
  const { steps, rowsPerStep, farRows, objective } = options
  const update = learnable.update(theta)
  const terms = termsOf[objective]
  const chains: Chain[] = []
  for (const stream of streams) {
    const { motion, row, state, isFresh } = stream
    if (isFresh) update.copy(update.initial(), state)
    const first = update.initial()
    update.copy(state, first)
    const tape = learnable.tape(theta, steps)
    tape.run(state, motion, row)
    const lags = LAGS.map(lag => stepsOfLag(lag, rowsPerStep, periodOf(motion)))
    const far = pickFar(motion, row + steps * rowsPerStep, farRows, random)
    if (update.isFinite(state)) chains.push({ stream, tape, first, row, isFresh, lags, far })
    else stream.restart(update)
  }

  const sums = [false, true].map(() => ({ errors: new Float64Array(terms.length), counts: new Float64Array(terms.length) }))
  for (const chain of chains) addErrors(chain, update, options, sums[chain.stream.motion.unloaded ? 1 : 0])
  const present = sums.map(({ counts }) => counts[0] > 0)
  const shares = present[0] && present[1] ? [1 - unloadedShare, unloadedShare] : [1, 1]
  let outer = 0
  sums.forEach(({ errors, counts }, group) => {
    terms.forEach((term, k) => { if (term > 0 && counts[k] > 0) outer += shares[group] * term * Math.log(errors[k] / counts[k]) })
  })

  gradient.fill(0)
  for (const chain of chains) {
    const group = chain.stream.motion.unloaded ? 1 : 0
    const weights = terms.map((term, k) => (term > 0 && sums[group].counts[k] > 0
      ? (shares[group] * term) / sums[group].errors[k]
      : 0))
    addSlopes(chain, update, options, weights, learnable.decayIndex, gradient)
  }
  for (const chain of chains) advance(chain, update, options)
  return outer
}

/** Rows far from `now` under the payload that is in the gripper just before row `end`. */
function pickFar(motion: LinearMotion, end: number, count: number, random: Random): number[] {
  const { changes, time, rows } = motion
  if (changes === null) return []
  const now = time[Math.min(end, rows) - 1]
  const isSame = (row: number) => changes.every(change => change > now === change > time[row])
  const picked: number[] = []
  for (let attempt = 0; attempt < 4 * count && picked.length < count; attempt++) {
    const row = random.integer(rows)
    if (isSame(row)) picked.push(row)
  }
  return picked
}

/** The values a step's batch is predicted with at a lag, and their index on the tape; −1: from before the chain. */
function knownAt(
  { tape, first, stream }: Chain, step: number, lag: number,
): { values: Float64Array; asOf: number; index: number } {
  const index = step - lag
  if (index >= 0) return { values: tape.values[index], asOf: tape.asOf[index], index }
  const before = stream.past[stream.past.length + index]
  return before
    ? { ...before, index: -1 }
    : { values: stream.past[0]?.values ?? first.values, asOf: stream.past[0]?.asOf ?? first.asOf, index: -1 }
}

function addErrors(
  chain: Chain, update: LinearUpdate, { steps, rowsPerStep }: LinearMetaTrainingOptions,
  sums: { errors: Float64Array; counts: Float64Array },
): void {
  forEachError(chain, update, steps, rowsPerStep, (term, _index, e) => {
    sums.errors[term] += e * e
    sums.counts[term]++
  })
}

/** Derivatives of weights[term] · e² with respect to the values on the tape, then through the tape to θ. */
function addSlopes(
  chain: Chain, update: LinearUpdate, { steps, rowsPerStep }: LinearMetaTrainingOptions, weights: readonly number[],
  decayIndex: number,
  gradient: Float64Array,
): void {
  const { tape, stream, isFresh } = chain
  const { size, decay } = update
  const slopes = tape.values.map(values => new Float64Array(values.length))
  const { basis } = stream.motion
  forEachError(chain, update, steps, rowsPerStep, (term, index, e, k, j, left, age, bias) => {
    if (weights[term] === 0) return
    const factor = -2 * weights[term] * e
    // b fades by ρ^age, which depends on κ: ∂(left · b)/∂ ln κ = −age κ left b.
    gradient[decayIndex] -= factor * left * bias * age * decay
    if (index < 0) return
    const slope = slopes[index]
    for (let c = 0; c < size; c++) slope[c] += factor * basis[k * size + c]
    slope[size + j] += factor * left
  })
  tape.addGradient(slopes, isFresh, gradient)
}

type OnError = (term: number, index: number, e: number, k: number, joint: number, left: number, age: number, bias: number) => void

function forEachError(
  chain: Chain, { size, joints, decay }: LinearUpdate, steps: number, rowsPerStep: number, visit: OnError,
): void {
  const { stream, row, lags, far, tape } = chain
  const { time, residual, basis } = stream.motion
  for (let i = 0; i < steps; i++) {
    for (let term = 0; term < lags.length; term++) {
      const { values, asOf, index } = knownAt(chain, i, lags[term])
      for (let r = row + i * rowsPerStep; r < row + (i + 1) * rowsPerStep; r++) {
        const age = time[r] > asOf ? time[r] - asOf : 0
        const left = exp(-decay * age)
        for (let j = 0; j < joints; j++) {
          const k = r * joints + j
          const bias = values[size + j]
          let e = residual[k] - left * bias
          for (let c = 0; c < size; c++) e -= basis[k * size + c] * values[c]
          visit(term, index, e, k, j, left, age, bias)
        }
      }
    }
  }
  const last = tape.values[steps]
  for (const r of far) {
    for (let j = 0; j < joints; j++) {
      const k = r * joints + j
      let e = residual[k]
      for (let c = 0; c < size; c++) e -= basis[k * size + c] * last[c]
      visit(lags.length, steps, e, k, j, 0, 0, 0)
    }
  }
}

function advance(
  { stream, tape, lags, row }: Chain, update: LinearUpdate, { steps, rowsPerStep }: LinearMetaTrainingOptions,
): void {
  const kept = Math.max(...lags)
  const added = tape.values.slice(0, steps).map((values, k) => ({ values: values.slice(), asOf: tape.asOf[k] }))
  stream.past = [...stream.past, ...added].slice(-kept - 1)
  stream.row = row + steps * rowsPerStep
  stream.isFresh = false
  if (stream.row + steps * rowsPerStep > stream.motion.rows) stream.restart(update)
}

function shorten(vector: Float64Array, limit: number): void {
  let square = 0
  for (const value of vector) square += value * value
  const length = Math.sqrt(square)
  if (length > limit) for (let k = 0; k < vector.length; k++) vector[k] *= limit / length
}

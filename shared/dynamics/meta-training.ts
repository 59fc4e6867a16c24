import { exp } from './elementary.ts'
import { lossKinds, type LossName, type LossShape } from './losses/index.ts'
import { createMetaGradient, type ChainShape, type MetaGradient, type Scheme, type Stretch } from './meta-gradient.ts'
import type { NormalisedMotion } from './motion.ts'
import { meanNextBatchError, predictMotion, type AdaptationRule, type Base, type NextBatchMeasure } from './prequential.ts'
import { createRandom, type Random } from './random.ts'
import { adam } from './updates/adam.ts'
import type { UpdateName } from './updates/index.ts'

/** What a meta-training is asked for. */
export interface MetaTrainingOptions {
  readonly scheme: Scheme
  readonly loss: LossName
  readonly positive: LossShape['positive']
  /** Width of the loss's own network, where it has one. */
  readonly hidden: number
  /** Outer updates. */
  readonly updates: number
  /** K: inner steps unrolled in each. */
  readonly innerSteps: number
  /** Motions adapted to side by side; their hypergradients are averaged. */
  readonly streams: number
  readonly rowsPerStep: number
  /** Adam's rate on the learned values, falling to zero along a half cosine. */
  readonly outerRate: number
  readonly seed: number
  /** Computes the hypergradient; the double-precision reference unless given. */
  readonly createMetaGradient?: (shape: ChainShape) => MetaGradient
  /** Measures next-batch errors; the double-precision reference unless given. */
  readonly measure?: NextBatchMeasure
}

/** The settings that win in our experiments. */
export const defaultMetaTrainingOptions = {
  scheme: 'all',
  loss: 'state_dependent',
  positive: 'exp',
  hidden: 32,
  updates: 800,
  innerSteps: 15,
  streams: 16,
  rowsPerStep: 4,
  outerRate: 2e-2,
  seed: 1,
} as const satisfies MetaTrainingOptions

/** One way to adapt, with the settings found best for it on the validation motions. */
export interface TunedRule {
  readonly name: string
  readonly rule: AdaptationRule
  /** Mean next-batch error on the validation motions, base standard deviations squared. */
  readonly error: number
}

/** Where a meta-training is; yielded after every outer update and every rate tried. */
export type MetaTrainingProgress =
  | { readonly phase: 'rates'; readonly name: string; readonly rate: number; readonly error: number }
  | {
      readonly phase: 'updates'
      /** From 1. */
      readonly update: number
      readonly updates: number
      /** Mean over the streams of the next-batch error within the unrolled steps; NaN when all diverged. */
      readonly outer: number
      /** Next-batch error on the validation motions, where this update was checked. */
      readonly validation?: number
    }

/** What a meta-training gives. */
export interface MetaTrainingResult {
  /** The learned loss with its recommended settings; its φ is in single precision, as it is stored. */
  readonly learned: TunedRule
  /** Base alone: no adaptation. */
  readonly none: number
  /** Plain squared error with its own best settings, by stochastic gradient steps and by Adam. */
  readonly rivals: readonly TunedRule[]
}

/**
 * Learns a loss by bi-level optimisation: streams of motions are adapted to by gradient steps under the loss, and the
 * loss moves so that what follows each step is predicted better. The inner rate is a third of the best rate of plain
 * squared error, so that the weights have room to grow; afterwards the rate is tuned on the validation motions. The state
 * of φ that did best there is kept. All of it counts the error at a somewhat higher rate too: the best rate alone lies at the
 * edge of stability, and the next motion may lie beyond.
 *
 * A generator: nothing happens between two `next` calls, so a worker can report progress, and cancel by not calling again.
 *
 * @param training  motions to learn from; each at least (innerSteps + 1) · rowsPerStep rows
 * @param validation  motions that choose rates and the update kept; at least one
 * @throws {RangeError} a list is empty, or no training motion is long enough
 */
export function* metaTrain(
  base: Base,
  training: readonly NormalisedMotion[],
  validation: readonly NormalisedMotion[],
  options: MetaTrainingOptions,
): Generator<MetaTrainingProgress, MetaTrainingResult> {
  const joints = base.network.sizes.at(-1)!
  const lossShape: LossShape = { joints, inputs: base.network.sizes[0], hidden: options.hidden, positive: options.positive }
  const long = training.filter(({ rows }) => rows >= (options.innerSteps + 1) * options.rowsPerStep)
  if (validation.length === 0) {
    throw new RangeError('Meta-training needs at least one validation recording: rates are chosen on them.')
  }
  if (long.length === 0) {
    throw new RangeError(`Meta-training needs a recording of at least ${(options.innerSteps + 1) * options.rowsPerStep} rows.`)
  }

  const plain = (update: UpdateName): AdaptationRule => ({
    scheme: options.scheme,
    update,
    rate: 0,
    rowsPerStep: options.rowsPerStep,
    loss: 'mse',
    lossShape,
    lossParameters: new Float64Array(0),
    fadingRate: 0,
  })
  const none = meanNextBatchError(base, validation, plain('sgd'), options.measure)
  const sgd = yield* tuneRule('mse, sgd', base, validation, plain('sgd'), startRates.sgd, options.measure)
  const adamRule = yield* tuneRule('mse, adam', base, validation, plain('adam'), startRates.adam, options.measure)
  const rivals = [sgd, adamRule]
  if (options.loss === 'mse') return { learned: sgd, none, rivals }

  const shape: ChainShape = {
    scheme: options.scheme,
    network: base.network,
    loss: options.loss,
    lossShape,
    steps: options.innerSteps,
    rowsPerStep: options.rowsPerStep,
  }
  const random = createRandom(options.seed)
  const start = startValues(shape, sgd.rule, random)
  const best = yield* learn(base, long, validation, shape, start, none, options, random)
  const rule = ruleOf(shape, Float64Array.from(Float32Array.from(best)))
  const learned = yield* tuneRule(options.loss, base, validation, rule, rule.rate, options.measure)
  return { learned, none, rivals }
}

/** Middle of the rates searched; they reach a searchSpan to both sides. */
const startRates = { sgd: 0.02, adam: 1e-3 }

/** Share of the best rate of plain squared error at which a loss is learned. */
const innerRateShare = 1 / 3

/** κ, 1/s, tried for a bias, and the least that learning starts from: it moves ln κ. */
const fadingRates = [0, 0.1, 0.3, 1, 3]
const leastLearnedFading = 0.03

/** Updates between two looks at the validation motions. */
const checkEvery = 20

/** Multiple of the base's own error beyond which a stream is lost. */
const lostBeyond = 3

/** Longest outer gradient of a stream taken as it is; longer ones are shortened, or one unstable stream would decide alone. */
const gradientLimit = 1

function startValues(shape: ChainShape, plain: AdaptationRule, random: Random): Float64Array {
  const phi = lossKinds[shape.loss].initialParameters(shape.lossShape, random)
  const values = [...phi, Math.log(plain.rate * innerRateShare)]
  if (shape.scheme === 'bias') values.push(Math.log(Math.max(plain.fadingRate, leastLearnedFading)))
  return Float64Array.from(values)
}

function ruleOf(shape: ChainShape, learned: Float64Array): AdaptationRule {
  const count = lossKinds[shape.loss].parameterCount(shape.lossShape)
  return {
    scheme: shape.scheme,
    update: 'sgd',
    rate: exp(learned[count]),
    rowsPerStep: shape.rowsPerStep,
    loss: shape.loss,
    lossShape: shape.lossShape,
    lossParameters: learned.slice(0, count),
    fadingRate: shape.scheme === 'bias' ? exp(learned[count + 1]) : 0,
  }
}

/** The outer loop. Returns the learned values that did best on the validation motions. */
function* learn(
  base: Base,
  training: readonly NormalisedMotion[],
  validation: readonly NormalisedMotion[],
  shape: ChainShape,
  start: Float64Array,
  none: number,
  options: MetaTrainingOptions,
  random: Random,
): Generator<MetaTrainingProgress, Float64Array> {
  const meta = (options.createMetaGradient ?? createMetaGradient)(shape)
  const streams = createStreams(base, training, shape, meta.adaptedCount, options.streams, random)
  const learned = start.slice()
  const state = adam.initialState(learned.length)
  const gradient = new Float64Array(learned.length)
  const mean = new Float64Array(learned.length)
  const faster = new Float64Array(learned.length)
  const rateAt = lossKinds[shape.loss].parameterCount(shape.lossShape)
  let best = { learned: learned.slice(), score: stabilityScore(base, validation, ruleOf(shape, learned), options.measure).score }

  /** Every other stream runs at a rate above the learned one, so that what is learned is stable with room to spare. */
  function ahead(values: Float64Array): Float64Array {
    faster.set(values)
    faster[rateAt] += Math.log(stabilityMargin)
    return faster
  }

  for (let update = 1; update <= options.updates; update++) {
    mean.fill(0)
    let outer = 0
    let finite = 0
    for (const [index, stream] of streams.entries()) {
      const error = meta.compute(stream.stretch(), stream.adapted, index % 2 === 0 ? learned : ahead(learned), gradient)
      if (!Number.isFinite(error) || !gradient.every(Number.isFinite)) {
        stream.restart()
        continue
      }
      shorten(gradient, gradientLimit)
      for (let k = 0; k < mean.length; k++) mean[k] += gradient[k]
      outer += error
      finite++
      // A stream this far off would teach nothing but its own way back; what drove it off has been counted.
      if (error > lostBeyond * none) stream.restart()
      else stream.advance()
    }
    if (finite > 0) {
      for (let k = 0; k < mean.length; k++) mean[k] /= finite
      const rate = options.outerRate * 0.5 * (1 + Math.cos((Math.PI * (update - 1)) / options.updates))
      adam.step(learned, mean, state, rate)
    } else {
      learned[rateAt] -= Math.LN2
    }
    let validationError: number | undefined
    if (update % checkEvery === 0 || update === options.updates) {
      const checked = stabilityScore(base, validation, ruleOf(shape, learned), options.measure)
      validationError = checked.error
      if (checked.score < best.score) best = { learned: learned.slice(), score: checked.score }
    }
    const meanOuter = finite > 0 ? outer / finite : NaN
    yield { phase: 'updates', update, updates: options.updates, outer: meanOuter, validation: validationError }
  }
  return best.learned
}

interface Stream {
  /** θ (or b), carried from stretch to stretch. */
  readonly adapted: Float64Array
  /** The stretch it is at; the arrays are views and change with the next call. */
  stretch(): Stretch
  /** Moves on by the steps taken, or to the start of another motion when this one has no full stretch left. */
  advance(): void
  /** Starts another motion from the base. */
  restart(): void
}

function createStreams(
  base: Base,
  motions: readonly NormalisedMotion[],
  shape: ChainShape,
  adaptedCount: number,
  count: number,
  random: Random,
): Stream[] {
  const { rowsPerStep, steps, scheme, network } = shape
  const inputs = network.sizes[0]
  const joints = network.sizes.at(-1)!
  const rows = (steps + 1) * rowsPerStep
  const predictions = scheme === 'bias' ? motions.map(motion => predictMotion(base, motion)) : []
  const ahead = new Float64Array(rows)

  return Array.from({ length: count }, () => {
    const adapted = new Float64Array(adaptedCount)
    let chosen = 0
    let row = 0

    function restart(): void {
      chosen = random.integer(motions.length)
      row = 0
      if (scheme === 'bias') adapted.fill(0)
      else adapted.set(base.parameters)
    }

    function advance(): void {
      row += steps * rowsPerStep
      if (row + rows > motions[chosen].rows) restart()
    }

    function stretch(): Stretch {
      const { x, measured, time } = motions[chosen]
      for (let r = 0; r < rows; r++) {
        const newestBefore = row + Math.floor(r / rowsPerStep) * rowsPerStep - 1
        ahead[r] = time[row + r] - time[Math.max(newestBefore, 0)]
      }
      const ofJoints = (table: Float64Array) => table.subarray(row * joints, (row + rows) * joints)
      return {
        x: x.subarray(row * inputs, (row + rows) * inputs),
        measured: ofJoints(measured),
        base: scheme === 'bias' ? ofJoints(predictions[chosen]) : measured,
        ahead,
      }
    }

    restart()
    // Each begins somewhere else, or all would reach the end of their motions together.
    row = random.integer(Math.floor((motions[chosen].rows - rows) / rowsPerStep) + 1) * rowsPerStep
    return { adapted, stretch, advance, restart }
  })
}

function shorten(vector: Float64Array, limit: number): void {
  let square = 0
  for (const value of vector) square += value * value
  const length = Math.sqrt(square)
  if (length <= limit) return
  for (let k = 0; k < vector.length; k++) vector[k] *= limit / length
}

/**
 * Finds the rate, and under `bias` the fading, with the least next-batch error on the validation motions: a scan in factors
 * of two, then two refinements around the best.
 */
export function* tuneRule(
  name: string,
  base: Base,
  validation: readonly NormalisedMotion[],
  rule: AdaptationRule,
  startRate: number,
  measure?: NextBatchMeasure,
): Generator<MetaTrainingProgress, TunedRule> {
  const fadings = rule.scheme !== 'bias' ? [0] : [...new Set([rule.fadingRate, ...fadingRates])]
  let best: TunedRule = { name, rule, error: Infinity }
  for (const fadingRate of fadings) {
    const tuned = yield* tuneRate(name, base, validation, { ...rule, fadingRate }, startRate, measure)
    if (tuned.error < best.error) best = tuned
  }
  return best
}

function* tuneRate(
  name: string,
  base: Base,
  validation: readonly NormalisedMotion[],
  rule: AdaptationRule,
  startRate: number,
  measure?: NextBatchMeasure,
): Generator<MetaTrainingProgress, TunedRule> {
  const none = meanNextBatchError(base, validation, { ...rule, rate: 0 }, measure)
  let best: TunedRule & { score: number } = { name, rule, error: Infinity, score: Infinity }
  for (let rate = startRate / searchSpan; rate <= startRate * searchSpan; rate *= 2) {
    const score = yield* attempt(rate)
    // Far beyond the best rate everything diverges, and costs time to no end.
    if (score > 4 * none && score > 4 * best.score) break
  }
  for (const factor of [Math.SQRT2, 2 ** 0.25]) {
    const middle = best.rule.rate
    for (const rate of [middle * factor, middle / factor]) yield* attempt(rate)
  }
  return { name, rule: best.rule, error: best.error }

  function* attempt(rate: number): Generator<MetaTrainingProgress, number> {
    const { error, score } = stabilityScore(base, validation, { ...rule, rate }, measure)
    if (score < best.score) best = { name, rule: { ...rule, rate }, error, score }
    yield { phase: 'rates', name, rate, error }
    return score
  }
}

/** Rates are searched from a start divided by this to a start times this. */
const searchSpan = 64

/** Error at a rule's rate, and its mean with that a little above: a rate with a bad neighbour is at the edge of stability. */
function stabilityScore(base: Base, motions: readonly NormalisedMotion[], rule: AdaptationRule, measure?: NextBatchMeasure) {
  const error = meanNextBatchError(base, motions, rule, measure)
  const above = meanNextBatchError(base, motions, { ...rule, rate: rule.rate * stabilityMargin }, measure)
  return { error, score: 0.5 * (error + above) }
}

/** Room a chosen rate has above it. */
const stabilityMargin = 1.25

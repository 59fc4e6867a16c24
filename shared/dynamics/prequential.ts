import { exp } from './elementary.ts'
import { lossKinds, type LossName, type LossShape } from './losses/index.ts'
import type { Scheme } from './meta-gradient.ts'
import type { NormalisedMotion } from './motion.ts'
import { backward, createNetworkPass, firstTrainedLayer, forward, type NetworkShape } from './network.ts'
import { updateKinds, type UpdateName } from './updates/index.ts'

/** A base network in double precision. */
export interface Base {
  readonly network: NetworkShape
  readonly parameters: Float64Array
}

/** Everything that decides how a motion is adapted to. */
export interface AdaptationRule {
  readonly scheme: Scheme
  readonly update: UpdateName
  /** Step size. */
  readonly rate: number
  readonly rowsPerStep: number
  readonly loss: LossName
  readonly lossShape: LossShape
  /** φ. */
  readonly lossParameters: Float64Array
  /** κ, 1/s: under `bias` the bias falls to e^−κ of itself within a second. */
  readonly fadingRate: number
}

/** What one pass over a motion gives. */
export interface PrequentialError {
  /** Mean squared error over rows and joints, base standard deviations squared; Infinity when the adaptation diverged. */
  readonly error: number
  /** The same per joint. */
  readonly perJoint: Float64Array
}

/** Called after each step: its number from 0, what is adapted now, and the step's Euclidean norm. */
export type OnStep = (step: number, adapted: Float64Array, stepNorm: number) => void

/**
 * Adapts along a motion and measures the next-batch error: every batch is predicted with what was known before it, then
 * stepped on. Rows that do not fill a batch at the end are left out.
 *
 * Source: prequential error, Dawid 1984.
 */
export function measureNextBatch(
  base: Base, motion: NormalisedMotion, rule: AdaptationRule, onStep?: OnStep,
): PrequentialError {
  if (rule.scheme === 'bias') return measureBias(base, motion, rule, onStep)
  return measureNetwork(base, motion, rule, rule.scheme, onStep)
}

/** Measures the next-batch error of one motion: `measureNextBatch(…).error`, or the same from faster code. */
export interface NextBatchMeasure {
  (base: Base, motion: NormalisedMotion, rule: AdaptationRule): number
}

/**
 * Mean next-batch error of several motions, each adapted to from the base.
 *
 * @param measure  the double-precision reference unless given
 */
export function meanNextBatchError(
  base: Base,
  motions: readonly NormalisedMotion[],
  rule: AdaptationRule,
  measure: NextBatchMeasure = (...given) => measureNextBatch(...given).error,
): number {
  let sum = 0
  for (const motion of motions) sum += measure(base, motion, rule)
  return sum / motions.length
}

/** The base's own predictions on a motion, rows × joints, base standard deviations. */
export function predictMotion({ network, parameters }: Base, motion: NormalisedMotion): Float64Array {
  const rowsAtATime = 64
  const pass = createNetworkPass(network, rowsAtATime)
  const inputs = network.sizes[0]
  const joints = network.sizes.at(-1)!
  const predicted = new Float64Array(motion.rows * joints)
  for (let row = 0; row < motion.rows; row += rowsAtATime) {
    const rows = Math.min(rowsAtATime, motion.rows - row)
    const x = motion.x.subarray(row * inputs, (row + rows) * inputs)
    forward(pass, parameters, x, rows, predicted.subarray(row * joints, (row + rows) * joints))
  }
  return predicted
}

function measureNetwork(
  { network, parameters }: Base,
  motion: NormalisedMotion,
  rule: AdaptationRule,
  scheme: 'all' | 'last_layer',
  onStep: OnStep | undefined,
): PrequentialError {
  const { rowsPerStep, lossParameters } = rule
  const inputs = network.sizes[0]
  const joints = network.sizes.at(-1)!
  const from = firstTrainedLayer(network, scheme)
  const pass = createNetworkPass(network, rowsPerStep)
  const loss = lossKinds[rule.loss].create(rule.lossShape, rowsPerStep)
  const adapted = parameters.slice()
  const before = new Float64Array(onStep === undefined ? 0 : adapted.length)
  const gradient = new Float64Array(adapted.length)
  const update = updateKinds[rule.update]
  const state = update.initialState(adapted.length)
  const predicted = new Float64Array(rowsPerStep * joints)
  const slope = new Float64Array(rowsPerStep * joints)
  const squares = new Float64Array(joints)
  const steps = Math.floor(motion.rows / rowsPerStep)
  for (let step = 0; step < steps; step++) {
    const row = step * rowsPerStep
    const x = motion.x.subarray(row * inputs, (row + rowsPerStep) * inputs)
    const measured = motion.measured.subarray(row * joints, (row + rowsPerStep) * joints)
    forward(pass, adapted, x, rowsPerStep, predicted)
    if (!addSquares(measured, predicted, squares)) return diverged(joints)
    loss.gradient(lossParameters, { rows: rowsPerStep, x, measured, predicted }, slope)
    backward(pass, adapted, slope, from, gradient)
    if (onStep !== undefined) before.set(adapted)
    update.step(adapted, gradient, state, rule.rate)
    onStep?.(step, adapted, distance(before, adapted))
  }
  return means(squares, steps * rowsPerStep)
}

// A search for rate and fading asks for the same predictions hundreds of times; they outlive neither base nor motion.
const predictions = new WeakMap<Base, WeakMap<NormalisedMotion, Float64Array>>()

function predictOnce(base: Base, motion: NormalisedMotion): Float64Array {
  const known = predictions.get(base) ?? new WeakMap<NormalisedMotion, Float64Array>()
  predictions.set(base, known)
  const predicted = known.get(motion) ?? predictMotion(base, motion)
  known.set(motion, predicted)
  return predicted
}

function measureBias(base: Base, motion: NormalisedMotion, rule: AdaptationRule, onStep: OnStep | undefined): PrequentialError {
  const { rowsPerStep, lossParameters, fadingRate } = rule
  const inputs = base.network.sizes[0]
  const joints = base.network.sizes.at(-1)!
  const basePredicted = predictOnce(base, motion)
  const loss = lossKinds[rule.loss].create(rule.lossShape, rowsPerStep)
  const bias = new Float64Array(joints)
  const before = new Float64Array(joints)
  const gradient = new Float64Array(joints)
  const update = updateKinds[rule.update]
  const state = update.initialState(joints)
  const predicted = new Float64Array(rowsPerStep * joints)
  const slope = new Float64Array(rowsPerStep * joints)
  const squares = new Float64Array(joints)
  const steps = Math.floor(motion.rows / rowsPerStep)
  for (let step = 0; step < steps; step++) {
    const row = step * rowsPerStep
    const asOf = motion.time[Math.max(row - 1, 0)]
    const measured = motion.measured.subarray(row * joints, (row + rowsPerStep) * joints)
    for (let r = 0; r < rowsPerStep; r++) addFaded(r, exp(-fadingRate * (motion.time[row + r] - asOf)))
    if (!addSquares(measured, predicted, squares)) return diverged(joints)

    const fade = exp(-fadingRate * (motion.time[row + rowsPerStep - 1] - asOf))
    for (let r = 0; r < rowsPerStep; r++) addFaded(r, fade)
    const x = motion.x.subarray(row * inputs, (row + rowsPerStep) * inputs)
    loss.gradient(lossParameters, { rows: rowsPerStep, x, measured, predicted }, slope)
    before.set(bias)
    gradient.fill(0)
    for (let k = 0; k < slope.length; k++) gradient[k % joints] += slope[k]
    for (let j = 0; j < joints; j++) bias[j] *= fade
    update.step(bias, gradient, state, rule.rate)
    onStep?.(step, bias, distance(before, bias))

    function addFaded(r: number, share: number): void {
      for (let j = 0; j < joints; j++) predicted[r * joints + j] = basePredicted[(row + r) * joints + j] + share * bias[j]
    }
  }
  return means(squares, steps * rowsPerStep)
}

/** Adds the squared errors of a batch per joint; false when one is not finite. */
function addSquares(measured: Float64Array, predicted: Float64Array, squares: Float64Array): boolean {
  for (let k = 0; k < predicted.length; k++) {
    const e = measured[k] - predicted[k]
    squares[k % squares.length] += e * e
  }
  return squares.every(Number.isFinite)
}

function means(squares: Float64Array, rows: number): PrequentialError {
  const perJoint = squares.map(sum => sum / rows)
  return { error: perJoint.reduce((sum, value) => sum + value, 0) / perJoint.length, perJoint }
}

function diverged(joints: number): PrequentialError {
  return { error: Infinity, perJoint: new Float64Array(joints).fill(Infinity) }
}

function distance(a: Float64Array, b: Float64Array): number {
  let sum = 0
  for (let k = 0; k < a.length; k++) sum += (a[k] - b[k]) ** 2
  return Math.sqrt(sum)
}

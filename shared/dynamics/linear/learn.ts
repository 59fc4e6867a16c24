import { exp } from '../elementary.ts'
import { lossKinds } from '../losses/index.ts'
import type { LossName, LossShape } from '../losses/index.ts'
import type { Positive } from '../losses/positive.ts'
import { createRandom } from '../random.ts'
import { createFirstOrderUpdate } from './first-order.ts'
import type { FirstOrderConstants } from './first-order.ts'
import { createLearnableFirstOrder, firstOrderConstantsOf, thetaOfFirstOrder } from './learnable-first-order.ts'
import { constantsOf, createLearnableRecursive, thetaOf } from './learnable-recursive.ts'
import { createLeastSquares } from './least-squares.ts'
import type { LeastSquaresSettings } from './least-squares.ts'
import type { LinearMotion } from './linear-motion.ts'
import type { LinearErrors } from './measure.ts'
import { judge, metaTrainLinear } from './meta-training.ts'
import type { LinearMetaTrainingOptions, LinearMetaTrainingProgress } from './meta-training.ts'
import { createRecursiveUpdate } from './recursive.ts'
import type { FilterConstants } from './recursive.ts'
import { startConstants } from './start.ts'
import type { LinearUpdate } from './update.ts'

/** Ways to adapt that can be learned or tuned: the filter, first-order steps under a loss, and the textbook rival. */
export type LinearCandidate = 'recursive' | LossName | 'least_squares'

export interface LearnLinearOptions extends LinearMetaTrainingOptions {
  /** Of a learned loss. */
  readonly positive: Positive
  readonly hidden: number
}

/** Constants by kind of candidate. */
export type LinearConstants =
  | { readonly kind: 'recursive'; readonly filter: FilterConstants }
  | { readonly kind: 'first_order'; readonly steps: FirstOrderConstants }
  | { readonly kind: 'least_squares'; readonly settings: LeastSquaresSettings }

export interface LearnedLinear {
  readonly constants: LinearConstants
  /** On the validation motions. */
  readonly validation: LinearErrors
  /** The outer update that was kept; undefined for what was tuned by search. */
  readonly update?: number
  /** A fresh update with these constants. */
  create(): LinearUpdate
}

/** The update that constants stand for. */
export function createLinearUpdate(constants: LinearConstants, size: number, joints: number): LinearUpdate {
  switch (constants.kind) {
    case 'recursive': return createRecursiveUpdate(constants.filter, size, joints)
    case 'first_order': return createFirstOrderUpdate(constants.steps, size, joints)
    case 'least_squares': return createLeastSquares(constants.settings, size, joints)
  }
}

/**
 * Learns the constants of one candidate from training motions, choosing on validation motions.
 *
 * @throws {RangeError} a list is empty, or no motion is long enough
 */
export function* learnLinear(
  candidate: LinearCandidate, training: readonly LinearMotion[], validation: readonly LinearMotion[], options: LearnLinearOptions,
): Generator<LinearMetaTrainingProgress, LearnedLinear> {
  if (training.length === 0 || validation.length === 0) {
    throw new RangeError(
      `${training.length} recordings to learn from and ${validation.length} to choose on: at least one of each is needed.`,
    )
  }
  const { residual, rows, basis, x } = training[0]
  const joints = residual.length / rows
  const size = basis.length / residual.length
  const { rowsPerStep } = options
  const give = (constants: LinearConstants, errors: LinearErrors, update?: number): LearnedLinear => ({
    constants, validation: errors, update, create: () => createLinearUpdate(constants, size, joints),
  })
  if (candidate === 'least_squares') {
    const { settings, errors } = tuneLeastSquares(validation, options, size, joints)
    return give({ kind: 'least_squares', settings }, errors)
  }
  if (candidate === 'recursive') {
    const learnable = createLearnableRecursive(size, joints, rowsPerStep)
    const { theta, validation: errors, update } = yield* metaTrainLinear(
      learnable, thetaOf(startConstants(training, rowsPerStep)), training, validation, options,
    )
    return give({ kind: 'recursive', filter: constantsOf(theta, size, joints, rowsPerStep) }, errors, update)
  }
  const lossShape: LossShape = { joints, inputs: x.length / rows, hidden: options.hidden, positive: options.positive }
  const learnable = createLearnableFirstOrder(size, joints, rowsPerStep, candidate, lossShape)
  const start = startFirstOrder(candidate, lossShape, training, options, size, joints)
  const learning = metaTrainLinear(learnable, thetaOfFirstOrder(start), training, validation, options)
  const { theta, validation: errors, update } = yield* learning
  const steps = firstOrderConstantsOf(theta, size + joints, rowsPerStep, candidate, lossShape)
  // As it is stored, in single precision.
  const lossParameters = Array.from(Float32Array.from(steps.lossParameters))
  return give({ kind: 'first_order', steps: { ...steps, lossParameters } }, errors, update)
}

const stepScales = [0.25, 0.5, 1, 2, 4, 8]

/** Equal step sizes for z and for b, as shares of what one step may take; the best of a few scales on the training motions. */
function startFirstOrder(
  loss: LossName, lossShape: LossShape, training: readonly LinearMotion[], { rowsPerStep, objective, seed }: LearnLinearOptions,
  size: number, joints: number,
): FirstOrderConstants {
  const lossParameters = lossKinds[loss].initialParameters(lossShape, createRandom(seed))
  const power = new Float64Array(size)
  let count = 0
  for (const { basis, residual } of training) {
    for (let k = 0; k < basis.length; k++) power[k % size] += basis[k] * basis[k]
    count += residual.length
  }
  const constants = (scale: number): FirstOrderConstants => ({
    rowsPerStep, decay: 0.7, loss, lossShape, lossParameters,
    steps: [
      ...Array.from(power, sum => (0.1 * scale * count) / Math.max(sum, 1e-9)),
      ...new Array<number>(joints).fill(0.1 * scale * joints),
    ],
  })
  const some = training.filter((_, k) => k % Math.ceil(training.length / 6) === 0)
  let best = { score: Infinity, constants: constants(stepScales[0]) }
  for (const scale of stepScales) {
    const { score } = judge(createFirstOrderUpdate(constants(scale), size, joints), some, objective)
    if (score < best.score) best = { score, constants: constants(scale) }
  }
  return best.constants
}

/** Forgetting and initial variance with the best validation score: a grid in factors of two, then a finer one around it. */
function tuneLeastSquares(
  validation: readonly LinearMotion[], { rowsPerStep, objective }: LearnLinearOptions, size: number, joints: number,
): { settings: LeastSquaresSettings; errors: LinearErrors } {
  const settings: LeastSquaresSettings = { rowsPerStep, forgetting: 0, initial: 100 }
  let best = { score: Infinity, settings, errors: {} as LinearErrors }
  const attempt = (forgetting: number, initial: number): void => {
    const settings = { rowsPerStep, forgetting, initial }
    const judged = judge(createLeastSquares(settings, size, joints), validation, objective)
    if (judged.score < best.score) best = { ...judged, settings }
  }
  for (const initial of [1, 10, 100, 1000]) {
    attempt(0, initial)
    for (let power = -4; power <= 2; power++) attempt(exp(power * Math.LN2), initial)
  }
  const { forgetting, initial } = best.settings
  for (const factor of [0.7, 0.85, 1.2, 1.4]) attempt(forgetting * factor, initial)
  return best
}

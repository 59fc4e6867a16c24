import { exp } from '../elementary.ts'
import { lossKinds } from '../losses/index.ts'
import type { Loss, LossName, LossShape } from '../losses/index.ts'
import { checkLength, ShapeError } from '../shape-error.ts'
import { copyState, isFiniteState } from './recursive.ts'
import type { LinearRows, LinearState, LinearUpdate } from './update.ts'

/** What meta-training learns for first-order steps. p = basis size, n joints. */
export interface FirstOrderConstants {
  readonly rowsPerStep: number
  /** κ, 1/s, from 0. */
  readonly decay: number
  /** Step size of every value, z then b; length p + n, from 0. */
  readonly steps: readonly number[]
  readonly loss: LossName
  readonly lossShape: LossShape
  /** φ of the loss, canonical order. */
  readonly lossParameters: ArrayLike<number>
}

/** A first-order update that can say what its last step's slope was. */
export interface FirstOrderUpdate extends LinearUpdate {
  /** p + n: derivative of the loss with respect to the values at the last step. */
  readonly slope: Float64Array
}

/**
 * Plain gradient steps on [z, b] under a loss, every value with a step size of its own: b fades to the newest row, then
 * values ← values − steps ⊙ ∂L/∂values, L the loss over the group's rows.
 *
 * @throws {ShapeError} a length does not fit
 */
export function createFirstOrderUpdate(constants: FirstOrderConstants, size: number, joints: number): FirstOrderUpdate {
  const d = size + joints
  const { decay, rowsPerStep, lossShape } = constants
  checkLength('steps', constants.steps.length, d, `${size} states, ${joints} joints`)
  if (!(decay >= 0 && decay < Infinity)) throw new ShapeError(`decay is ${decay}, expected a finite number from 0.`)
  if (!Number.isInteger(rowsPerStep) || rowsPerStep < 1) {
    throw new ShapeError(`rowsPerStep is ${rowsPerStep}, expected a positive integer.`)
  }
  const steps = Float64Array.from(constants.steps)
  const phi = Float64Array.from(constants.lossParameters)
  const kind = lossKinds[constants.loss]
  checkLength('lossParameters', phi.length, kind.parameterCount(lossShape), constants.loss)
  const loss: Loss = kind.create(lossShape, rowsPerStep)
  const predicted = new Float64Array(rowsPerStep * joints)
  const slopes = new Float64Array(rowsPerStep * joints)
  const slope = new Float64Array(d)

  function letPass(state: LinearState, time: number): void {
    const seconds = time > state.asOf ? time - state.asOf : 0
    if (!(time <= state.asOf)) state.asOf = time
    if (seconds === 0 || decay === 0) return
    const left = exp(-decay * seconds)
    for (let k = size; k < d; k++) state.values[k] *= left
  }

  function step(state: LinearState, rows: LinearRows, from: number, to: number): void {
    const { values } = state
    letPass(state, rows.time[to - 1])
    const count = to - from
    predict(values, rows.basis, from * joints, count * joints, size, joints, predicted)
    // Views, since the loss reads its rows from the start of an array.
    const x = rows.x.subarray(from * lossShape.inputs, to * lossShape.inputs)
    const measured = rows.residual.subarray(from * joints, to * joints)
    loss.gradient(phi, { rows: count, x, measured, predicted }, slopes)
    pullBack(slopes, rows.basis, from * joints, count * joints, size, joints, slope)
    for (let k = 0; k < d; k++) values[k] -= steps[k] * slope[k]
  }

  return {
    size, joints, decay, rowsPerStep, slope,
    initial: () => ({ values: new Float64Array(d), covariance: new Float64Array(0), surprise: 0, opening: false, asOf: NaN }),
    copy: copyState,
    letPass,
    step,
    open: () => {},
    isFinite: isFiniteState,
  }
}

/** A(x) z + b for `count` values from basis row `first` on. */
export function predict(
  values: Float64Array, basis: Float64Array, first: number, count: number, size: number, joints: number, out: Float64Array,
): void {
  for (let k = 0; k < count; k++) {
    let sum = values[size + (k % joints)]
    for (let c = 0; c < size; c++) sum += basis[(first + k) * size + c] * values[c]
    out[k] = sum
  }
}

/** Hᵀ g, H = [A(x), 1]: what a slope in the prediction is in the values. Overwrites out. */
export function pullBack(
  slopes: Float64Array, basis: Float64Array, first: number, count: number, size: number, joints: number, out: Float64Array,
): void {
  out.fill(0)
  for (let k = 0; k < count; k++) {
    const g = slopes[k]
    out[size + (k % joints)] += g
    for (let c = 0; c < size; c++) out[c] += basis[(first + k) * size + c] * g
  }
}

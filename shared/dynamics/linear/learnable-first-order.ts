import { exp } from '../elementary.ts'
import { lossKinds } from '../losses/index.ts'
import type { LossName, LossShape } from '../losses/index.ts'
import { createFirstOrderUpdate, predict, pullBack } from './first-order.ts'
import type { FirstOrderConstants } from './first-order.ts'
import type { Learnable, Tape } from './learnable.ts'
import type { LinearRows } from './update.ts'

/** θ of first-order constants: ln of the step sizes, ln κ, then φ. */
export function thetaOfFirstOrder({ steps, decay, lossParameters }: FirstOrderConstants): Float64Array {
  return Float64Array.from([...Array.from(steps, Math.log), Math.log(Math.max(decay, 1e-12)), ...Array.from(lossParameters)])
}

/** The constants that θ stands for. */
export function firstOrderConstantsOf(
  theta: Float64Array, d: number, rowsPerStep: number, loss: LossName, lossShape: LossShape,
): FirstOrderConstants {
  return {
    rowsPerStep, loss, lossShape, decay: exp(theta[d]), steps: Array.from(theta.subarray(0, d), exp),
    lossParameters: theta.slice(d + 1),
  }
}

/** First-order steps with step sizes, fading and loss to be learned; the tape is exact reverse mode through the steps. */
export function createLearnableFirstOrder(
  size: number, joints: number, rowsPerStep: number, loss: LossName, lossShape: LossShape,
): Learnable {
  const d = size + joints
  const decode = (theta: Float64Array) => firstOrderConstantsOf(theta, d, rowsPerStep, loss, lossShape)
  return {
    decayIndex: d,
    update: theta => createFirstOrderUpdate(decode(theta), size, joints),
    tape: (theta, steps) => createTape(decode(theta), theta, size, joints, steps),
  }
}

function createTape(constants: FirstOrderConstants, theta: Float64Array, size: number, joints: number, steps: number): Tape {
  const d = size + joints
  const { rowsPerStep, decay, lossShape } = constants
  const count = rowsPerStep * joints
  const update = createFirstOrderUpdate(constants, size, joints)
  const loss = lossKinds[constants.loss].create(lossShape, rowsPerStep)
  const phi = theta.slice(d + 1)
  const rates = Float64Array.from(constants.steps)
  const values = Array.from({ length: steps + 1 }, () => new Float64Array(d))
  const priors = Array.from({ length: steps }, () => new Float64Array(d))
  const slopesOfLoss = Array.from({ length: steps }, () => new Float64Array(d))
  const seconds = new Float64Array(steps)
  const asOf = new Float64Array(steps + 1)
  const predicted = new Float64Array(count)
  const tangent = new Float64Array(count)
  const curved = new Float64Array(count)
  const direction = new Float64Array(d)
  const back = new Float64Array(d)
  const phiBar = new Float64Array(phi.length)
  let last: { rows: LinearRows; row: number } | undefined

  function run(state: Parameters<Tape['run']>[0], rows: LinearRows, row: number): void {
    last = { rows, row }
    values[0].set(state.values)
    asOf[0] = state.asOf
    for (let i = 0; i < steps; i++) {
      const from = row + i * rowsPerStep
      const now = rows.time[from + rowsPerStep - 1]
      seconds[i] = now > state.asOf ? now - state.asOf : 0
      update.letPass(state, now)
      priors[i].set(state.values)
      update.step(state, rows, from, from + rowsPerStep)
      slopesOfLoss[i].set(update.slope)
      values[i + 1].set(state.values)
      asOf[i + 1] = state.asOf
    }
  }

  function addGradient(slopes: readonly Float64Array[], _isFresh: boolean, gradient: Float64Array): void {
    const { rows, row } = last!
    phiBar.fill(0)
    for (let i = steps - 1; i >= 0; i--) {
      const sBar = slopes[i + 1]
      const from = row + i * rowsPerStep
      for (let k = 0; k < d; k++) {
        gradient[k] -= sBar[k] * slopesOfLoss[i][k] * rates[k]
        direction[k] = rates[k] * sBar[k]
      }
      predict(priors[i], rows.basis, from * joints, count, size, joints, predicted)
      predict(direction, rows.basis, from * joints, count, size, joints, tangent)
      const given = {
        rows: rowsPerStep,
        x: rows.x.subarray(from * lossShape.inputs, (from + rowsPerStep) * lossShape.inputs),
        measured: rows.residual.subarray(from * joints, (from + rowsPerStep) * joints),
        predicted,
      }
      loss.secondOrder(phi, given, tangent, curved, -1, phiBar)
      pullBack(curved, rows.basis, from * joints, count, size, joints, back)
      for (let k = 0; k < d; k++) sBar[k] -= back[k]
      const left = exp(-decay * seconds[i])
      for (let k = size; k < d; k++) {
        gradient[d] -= sBar[k] * priors[i][k] * seconds[i] * decay
        sBar[k] *= left
      }
      for (let k = 0; k < d; k++) slopes[i][k] += sBar[k]
    }
    for (let k = 0; k < phiBar.length; k++) gradient[d + 1 + k] += phiBar[k]
  }

  return { values, asOf, run, addGradient }
}

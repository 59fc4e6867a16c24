import { exp } from './elementary.ts'
import type { Loss, LossName, LossRows, LossShape } from './losses/index.ts'
import { lossKinds } from './losses/index.ts'
import {
  addBackwardTangent,
  backward,
  createNetworkPass,
  firstTrainedLayer,
  forward,
  forwardTangent,
  type NetworkShape,
} from './network.ts'
import { checkLength } from './shape-error.ts'

/** What an adaptation changes, of those whose hypergradient is computed here. */
export type Scheme = 'all' | 'last_layer' | 'bias'

/** The sizes of one unrolled chain of inner steps. */
export interface ChainShape {
  readonly scheme: Scheme
  readonly network: NetworkShape
  readonly loss: LossName
  readonly lossShape: LossShape
  /** K: inner steps unrolled. */
  readonly steps: number
  /** Rows of one batch, which is one inner step. */
  readonly rowsPerStep: number
}

/** K + 1 consecutive batches of a recording: each of the first K is stepped on, each of the last K judges the step before. */
export interface Stretch {
  /** (K + 1) · rowsPerStep × inputs: normalised network inputs. */
  readonly x: Float64Array
  /** (K + 1) · rowsPerStep × joints: measured torque, base standard deviations. */
  readonly measured: Float64Array
  /** (K + 1) · rowsPerStep × joints: the base's prediction there. Read under `bias` only. */
  readonly base: Float64Array
  /** (K + 1) · rowsPerStep: seconds since the newest row of the batch before. Read under `bias` only. */
  readonly ahead: Float64Array
}

/**
 * Computes hypergradients of one chain shape. The learned values are, in order: the loss's parameters φ; the natural
 * logarithm of the step size; under `bias` also the natural logarithm of the fading rate κ (1/s), ρ = e^−κ.
 *
 * The outer error is the mean over the K inner steps of the next batch's mean squared error:
 *   θ_t+1 = θ_t − rate · ∇θ L(θ_t, φ; batch t),   outer = (1/K) Σ_t MSE(θ_t+1; batch t + 1).
 * θ_0 is a constant: what led to it in earlier stretches is not differentiated.
 *
 * Source: unrolled bi-level optimisation, Franceschi, Frasconi, Salzo, Grazzi, Pontil 2018; Hessian-vector products,
 * Pearlmutter 1994.
 */
export interface MetaGradient {
  readonly shape: ChainShape
  /** Number of values adapted: the network's parameters, or under `bias` one per joint. */
  readonly adaptedCount: number
  /** Number of learned values. */
  readonly learnedCount: number
  /**
   * Runs the chain and differentiates it.
   *
   * @param adapted  in and out: θ_0 before, θ_K after
   * @param learned  φ, log step size, and under `bias` log fading rate
   * @param gradient  out, `learnedCount` values, overwritten: ∂outer/∂learned
   * @returns the outer error; not finite when the chain diverged, and then so may be gradient and adapted
   * @throws {ShapeError} an array has the wrong length
   */
  compute(stretch: Stretch, adapted: Float64Array, learned: Float64Array, gradient: Float64Array): number
}

/** Makes the hypergradient of a chain, double precision, with all its work arrays. */
export function createMetaGradient(shape: ChainShape): MetaGradient {
  return shape.scheme === 'bias' ? createBiasMetaGradient(shape) : createNetworkMetaGradient(shape, shape.scheme)
}

/** Number of learned values of a chain: φ, the log step size, under `bias` the log fading rate. */
export function learnedCount({ scheme, loss, lossShape }: ChainShape): number {
  return lossKinds[loss].parameterCount(lossShape) + (scheme === 'bias' ? 2 : 1)
}

function createNetworkMetaGradient(shape: ChainShape, scheme: 'all' | 'last_layer'): MetaGradient {
  const { network, steps, rowsPerStep } = shape
  const joints = network.sizes.at(-1)!
  const from = firstTrainedLayer(network, scheme)
  const loss = createLoss(shape)
  const rate = loss.parameterCount
  const count = learnedCount(shape)

  // One pass per inner step keeps what its second-order sweep needs; the last judges the end only.
  const passes = Array.from({ length: steps + 1 }, () => createNetworkPass(network, rowsPerStep))
  const { parameterCount } = passes[0]
  const thetas = passes.map(() => new Float64Array(parameterCount))
  const gradients = passes.map(() => new Float64Array(parameterCount))
  const batches = passes.map(() => createBatch(shape))
  const lambda = new Float64Array(parameterCount)
  const direction = new Float64Array(parameterCount)
  const lossGradient = new Float64Array(rowsPerStep * joints)
  const outerGradient = new Float64Array(rowsPerStep * joints)
  const tangent = new Float64Array(rowsPerStep * joints)
  const gradientTangent = new Float64Array(rowsPerStep * joints)

  function compute(stretch: Stretch, adapted: Float64Array, learned: Float64Array, gradient: Float64Array): number {
    checkStretch(shape, stretch)
    checkLength('adapted', adapted.length, parameterCount, 'the network has that many parameters')
    checkLength('learned', learned.length, count, `loss ${shape.loss}, scheme ${scheme}`)
    checkLength('gradient', gradient.length, count, 'one per learned value')
    const phi = learned.subarray(0, loss.parameterCount)
    const stepSize = exp(learned[rate])

    thetas[0].set(adapted)
    let outer = 0
    for (let t = 0; t <= steps; t++) {
      const batch = batches[t]
      fillBatch(stretch, t, shape, batch)
      forward(passes[t], thetas[t], batch.x, rowsPerStep, batch.predicted)
      if (t > 0) outer += meanSquare(batch, joints) / steps
      if (t === steps) break
      loss.gradient(phi, batch, lossGradient)
      backward(passes[t], thetas[t], lossGradient, from, gradients[t])
      for (let k = 0; k < parameterCount; k++) thetas[t + 1][k] = thetas[t][k] - stepSize * gradients[t][k]
    }
    adapted.set(thetas[steps])

    gradient.fill(0)
    outerSlope(batches[steps], joints, steps, outerGradient)
    backward(passes[steps], thetas[steps], outerGradient, from, lambda)
    const phiGradient = gradient.subarray(0, loss.parameterCount)
    for (let t = steps - 1; t >= 0; t--) {
      gradient[rate] -= stepSize * dot(lambda, gradients[t])
      forwardTangent(passes[t], thetas[t], lambda, from, tangent)
      loss.secondOrder(phi, batches[t], tangent, gradientTangent, -stepSize, phiGradient)
      if (t === 0) break
      // λ_t = λ_t+1 − rate · Hessian · λ_t+1 + what batch t's own error says of θ_t: one sweep does both.
      outerSlope(batches[t], joints, steps, outerGradient)
      direction.set(lambda)
      addBackwardTangent(passes[t], thetas[t], direction, gradientTangent, from, -stepSize, outerGradient, lambda)
    }
    return outer
  }

  return { shape, adaptedCount: parameterCount, learnedCount: count, compute }
}

/**
 * Under `bias` the prediction is base(x) + ρʰ b, h seconds after the newest row stepped on. A step first lets the bias
 * fade to the newest row of its batch, then steps on the batch with that one bias: b ← ρ^Δt b, b ← b − rate · ∂L/∂b.
 */
function createBiasMetaGradient(shape: ChainShape): MetaGradient {
  const { network, steps, rowsPerStep } = shape
  const joints = network.sizes.at(-1)!
  const loss = createLoss(shape)
  const rate = loss.parameterCount
  const fading = rate + 1
  const count = learnedCount(shape)

  const before = Array.from({ length: steps + 1 }, () => new Float64Array(joints))
  const gradients = Array.from({ length: steps + 1 }, () => new Float64Array(joints))
  const ahead = Array.from({ length: steps + 1 }, () => createBatch(shape))
  const stepped = Array.from({ length: steps + 1 }, () => createBatch(shape))
  const lambda = new Float64Array(joints)
  const slope = new Float64Array(rowsPerStep * joints)
  const tangent = new Float64Array(rowsPerStep * joints)
  const gradientTangent = new Float64Array(rowsPerStep * joints)

  function compute(stretch: Stretch, adapted: Float64Array, learned: Float64Array, gradient: Float64Array): number {
    checkStretch(shape, stretch)
    checkLength('adapted', adapted.length, joints, 'one bias per joint')
    checkLength('learned', learned.length, count, `loss ${shape.loss}, scheme bias`)
    checkLength('gradient', gradient.length, count, 'one per learned value')
    const phi = learned.subarray(0, loss.parameterCount)
    const stepSize = exp(learned[rate])
    const kappa = exp(learned[fading])
    const aheadOf = (t: number, r: number) => stretch.ahead[t * rowsPerStep + r]
    const fadeAt = (t: number, r: number) => exp(-kappa * aheadOf(t, r))
    // d(e^−κh)/d(ln κ) = −κ h e^−κh.
    const fadeSlope = (t: number, r: number) => -kappa * aheadOf(t, r) * fadeAt(t, r)
    const newest = rowsPerStep - 1

    before[0].set(adapted)
    let outer = 0
    for (let t = 0; t <= steps; t++) {
      fillBatch(stretch, t, shape, ahead[t])
      fillBatch(stretch, t, shape, stepped[t])
      for (let r = 0; r < rowsPerStep; r++) {
        for (let j = 0; j < joints; j++) {
          const base = stretch.base[(t * rowsPerStep + r) * joints + j]
          ahead[t].predicted[r * joints + j] = base + fadeAt(t, r) * before[t][j]
          stepped[t].predicted[r * joints + j] = base + fadeAt(t, newest) * before[t][j]
        }
      }
      if (t > 0) outer += meanSquare(ahead[t], joints) / steps
      if (t === steps) break
      loss.gradient(phi, stepped[t], slope)
      sumRows(slope, rowsPerStep, joints, gradients[t])
      for (let j = 0; j < joints; j++) {
        before[t + 1][j] = fadeAt(t, newest) * before[t][j] - stepSize * gradients[t][j]
      }
    }
    adapted.set(before[steps])

    gradient.fill(0)
    lambda.fill(0)
    const phiGradient = gradient.subarray(0, loss.parameterCount)
    for (let t = steps; t >= 1; t--) {
      outerSlope(ahead[t], joints, steps, slope)
      for (let r = 0; r < rowsPerStep; r++) {
        for (let j = 0; j < joints; j++) {
          lambda[j] += fadeAt(t, r) * slope[r * joints + j]
          gradient[fading] += fadeSlope(t, r) * before[t][j] * slope[r * joints + j]
        }
      }
      const from = t - 1
      gradient[rate] -= stepSize * dot(lambda, gradients[from])
      for (let r = 0; r < rowsPerStep; r++) tangent.set(lambda, r * joints)
      loss.secondOrder(phi, stepped[from], tangent, gradientTangent, -stepSize, phiGradient)
      for (let j = 0; j < joints; j++) {
        let curved = 0
        for (let r = 0; r < rowsPerStep; r++) curved += gradientTangent[r * joints + j]
        lambda[j] -= stepSize * curved
        gradient[fading] += fadeSlope(from, newest) * before[from][j] * lambda[j]
        lambda[j] *= fadeAt(from, newest)
      }
    }
    return outer
  }

  return { shape, adaptedCount: joints, learnedCount: count, compute }
}

interface Batch extends LossRows {
  readonly predicted: Float64Array
}

function createBatch({ network, rowsPerStep }: ChainShape): Batch {
  const inputs = network.sizes[0]
  const joints = network.sizes.at(-1)!
  return {
    rows: rowsPerStep,
    x: new Float64Array(rowsPerStep * inputs),
    measured: new Float64Array(rowsPerStep * joints),
    predicted: new Float64Array(rowsPerStep * joints),
  }
}

function fillBatch(stretch: Stretch, t: number, { network, rowsPerStep }: ChainShape, batch: Batch): void {
  const { x, measured } = batch
  const fromX = t * rowsPerStep * network.sizes[0]
  for (let k = 0; k < x.length; k++) x[k] = stretch.x[fromX + k]
  const fromMeasured = t * measured.length
  for (let k = 0; k < measured.length; k++) measured[k] = stretch.measured[fromMeasured + k]
}

function createLoss({ loss, lossShape, rowsPerStep }: ChainShape): Loss {
  return lossKinds[loss].create(lossShape, rowsPerStep)
}

function checkStretch({ network, steps, rowsPerStep, scheme }: ChainShape, stretch: Stretch): void {
  const rows = (steps + 1) * rowsPerStep
  const joints = network.sizes.at(-1)!
  const because = `${steps} steps and one batch after them, of ${rowsPerStep} rows`
  checkLength('x', stretch.x.length, rows * network.sizes[0], because)
  checkLength('measured', stretch.measured.length, rows * joints, because)
  if (scheme !== 'bias') return
  checkLength('base', stretch.base.length, rows * joints, because)
  checkLength('ahead', stretch.ahead.length, rows, because)
}

function meanSquare({ rows, measured, predicted }: Batch, joints: number): number {
  let sum = 0
  for (let k = 0; k < rows * joints; k++) {
    const e = measured[k] - predicted[k]
    sum += e * e
  }
  return sum / (rows * joints)
}

/** Derivative of one batch's share of the outer error with respect to its prediction. */
function outerSlope({ rows, measured, predicted }: Batch, joints: number, steps: number, slope: Float64Array): void {
  const scale = -2 / (rows * joints * steps)
  for (let k = 0; k < rows * joints; k++) slope[k] = scale * (measured[k] - predicted[k])
}

function sumRows(values: Float64Array, rows: number, joints: number, sums: Float64Array): void {
  for (let j = 0; j < joints; j++) {
    let sum = 0
    for (let r = 0; r < rows; r++) sum += values[r * joints + j]
    sums[j] = sum
  }
}

function dot(a: Float64Array, b: Float64Array): number {
  let sum = 0
  for (let k = 0; k < a.length; k++) sum += a[k] * b[k]
  return sum
}

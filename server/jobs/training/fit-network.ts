import { createRequire } from 'node:module'
import { dirname, sep } from 'node:path'
import * as tf from '@tensorflow/tfjs'
import { setThreadsCount, setWasmPaths } from '@tensorflow/tfjs-backend-wasm'
import { balanceNetwork } from '../../../shared/dynamics/balance.ts'
import { fitCoverage } from '../../../shared/dynamics/coverage.ts'
import { noiseOfResiduals, pickReferenceStates } from '../../../shared/dynamics/fit-statistics.ts'
import {
  fitNormalisation, networkOf, normaliseMotion, type Motion, type NormalisedMotion,
} from '../../../shared/dynamics/motion.ts'
import {
  createNetworkPass, forward, initialParameters, layerPlaces, parameterCount, type Activation, type NetworkShape,
} from '../../../shared/dynamics/network.ts'
import { createRandom, type Random } from '../../../shared/dynamics/random.ts'
import type { Normalisation, Version } from '../../../shared/dynamics/version.ts'
import { plantFrictionUnits } from './friction-units.ts'

export interface FitOptions {
  readonly joints: number
  /** Widths of the hidden layers. */
  readonly hidden: readonly number[]
  readonly activation: Activation
  /** Passes over the training rows. */
  readonly epochs: number
  /** Rows of one Adam step. */
  readonly rowsPerStep: number
  /** Adam's rate at the start; it falls to zero along a half cosine. */
  readonly rate: number
  readonly seed: number
  /** Called after every epoch; awaited, so a worker can let its messages through. */
  readonly onEpoch?: (epoch: FitEpoch) => void | Promise<void>
  /** Stops the fit between two epochs; fitNetwork then throws the signal's reason. */
  readonly signal?: AbortSignal
}

export const defaultFitOptions = {
  hidden: [64, 64],
  activation: 'relu',
  epochs: 60,
  rowsPerStep: 256,
  rate: 1e-2,
  seed: 1,
} as const

export interface FitEpoch {
  /** From 1. */
  readonly epoch: number
  readonly epochs: number
  /** Mean squared error, base standard deviations squared: on the training rows during the epoch, on those held out after it. */
  readonly trainingError: number
  readonly heldOutError: number
}

export interface FitMetrics {
  /** Mean squared error on the held-out motions, base standard deviations squared, averaged over joints. */
  readonly heldOutError: number
  /** Root mean square error per joint on all held-out motions, N·m (prismatic: N). */
  readonly rmse: number[]
  readonly motions: { readonly name: string; readonly rows: number; readonly rmse: number[] }[]
}

export interface FitResult {
  readonly version: Version
  readonly metrics: FitMetrics
  readonly curve: FitEpoch[]
}

/**
 * Fits a base network with Adam on normalised rows, drawn in random order. Motions are split whole: the held-out ones
 * choose nothing and only measure, so the metrics are on data the fit has not seen in any way.
 *
 * The same motions, options and seed give the same parameters on the same tfjs.
 *
 * @param training  motions to learn from, at least one row per step
 * @param heldOut  motions to measure on, at least one
 * @throws {RangeError} there is nothing to train or to measure on
 * @throws the signal's reason, when it was aborted
 */
export async function fitNetwork(
  training: readonly Motion[], heldOut: readonly Motion[], options: FitOptions,
): Promise<FitResult> {
  if (training.length === 0 || heldOut.length === 0) {
    const found = `${training.length} recordings to train on and ${heldOut.length} held out`
    throw new RangeError(`${found}: the fit needs at least one of each.`)
  }
  const { joints } = options
  const network = networkOf(joints, options.hidden, options.activation)
  const normalisation = fitNormalisation(training, joints)
  const trainingRows = joinRows(training.map(motion => normaliseMotion(motion, normalisation)))
  const heldOutMotions = heldOut.map(motion => normaliseMotion(motion, normalisation))

  const random = createRandom(options.seed)
  const start = initialParameters(network, random)
  plantFrictionUnits(network, start, zeroVelocityOf(normalisation, joints))
  const { parameters: fitted, curve } = await train(network, start, trainingRows, heldOutMotions, options, random)
  const parameters = balanced(network, fitted, trainingRows)

  const residuals = heldOutMotions.map(motion => residualsOf(network, parameters, motion))
  const states = concatenate(training.map(motion => motion.states))
  const version: Version = {
    description: {
      joints,
      network,
      normalisation,
      coverage: fitCoverage(states, states.length / (3 * joints), 3 * joints),
      noise: noiseOfResiduals(residuals, joints),
      referenceStates: pickReferenceStates(states, states.length / (3 * joints), 3 * joints),
    },
    parameters,
  }
  return { version, metrics: metricsOf(heldOut, residuals, normalisation.outputStd), curve }
}

interface Rows {
  readonly rows: number
  readonly x: Float64Array
  readonly measured: Float64Array
}

/** Rows on which the network is balanced, evenly spread. */
const balanceRows = 400

function balanced(network: NetworkShape, fitted: Float32Array, given: Rows): Float32Array {
  const inputs = network.sizes[0]
  const rows = Math.min(balanceRows, given.rows)
  const x = new Float64Array(rows * inputs)
  for (let r = 0; r < rows; r++) {
    const from = Math.floor(((r + 0.5) * given.rows) / rows) * inputs
    x.set(given.x.subarray(from, from + inputs), r * inputs)
  }
  const parameters = Float64Array.from(fitted)
  balanceNetwork(network, parameters, x, rows)
  return Float32Array.from(parameters)
}

function zeroVelocityOf({ inputMean, inputStd }: Normalisation, joints: number): number[] {
  return Array.from({ length: joints }, (_, joint) => -inputMean[joints + joint] / inputStd[joints + joint])
}

async function train(
  network: NetworkShape, start: Float64Array, given: Rows, heldOut: readonly NormalisedMotion[], options: FitOptions,
  random: Random,
) {
  await useFastestBackend()
  const model = createModel(network, start)
  const optimiser = tf.train.adam(options.rate)
  const inputs = network.sizes[0]
  const rowsPerStep = Math.min(options.rowsPerStep, given.rows)
  const stepsPerEpoch = Math.floor(given.rows / rowsPerStep)
  const x = tf.tensor2d(Float32Array.from(given.x), [given.rows, inputs])
  const measured = tf.tensor2d(Float32Array.from(given.measured), [given.rows, options.joints])
  const curve: FitEpoch[] = []
  try {
    for (let epoch = 1; epoch <= options.epochs; epoch++) {
      const order = Int32Array.from(random.order(given.rows))
      let trainingError = 0
      for (let step = 0; step < stepsPerEpoch; step++) {
        const done = ((epoch - 1) * stepsPerEpoch + step) / (options.epochs * stepsPerEpoch)
        setRate(optimiser, options.rate * 0.5 * (1 + Math.cos(Math.PI * done)))
        const chosen = order.subarray(step * rowsPerStep, (step + 1) * rowsPerStep)
        trainingError += stepOnce(model, optimiser, x, measured, chosen) / stepsPerEpoch
      }
      const parameters = readParameters(model, network)
      const entry = { epoch, epochs: options.epochs, trainingError, heldOutError: meanSquareOf(network, parameters, heldOut) }
      curve.push(entry)
      await options.onEpoch?.(entry)
      options.signal?.throwIfAborted()
    }
    return { parameters: readParameters(model, network), curve }
  } finally {
    tf.dispose([x, measured, ...model.weights, ...model.biases])
    optimiser.dispose()
  }
}

interface Model {
  readonly activation: Activation
  readonly weights: tf.Variable<tf.Rank.R2>[]
  readonly biases: tf.Variable<tf.Rank.R1>[]
}

function createModel(network: NetworkShape, start: Float64Array): Model {
  const places = layerPlaces(network)
  return {
    activation: network.activation,
    weights: places.map(({ inputs, outputs, weights }) =>
      tf.variable(tf.tensor2d(Float32Array.from(start.subarray(weights, weights + inputs * outputs)), [inputs, outputs]))),
    biases: places.map(({ outputs, biases }) =>
      tf.variable(tf.tensor1d(Float32Array.from(start.subarray(biases, biases + outputs))))),
  }
}

function stepOnce(model: Model, optimiser: tf.Optimizer, x: tf.Tensor2D, measured: tf.Tensor2D, chosen: Int32Array): number {
  const loss = tf.tidy(() => {
    const rows = tf.tensor1d(chosen, 'int32')
    const input = tf.gather(x, rows)
    const target = tf.gather(measured, rows)
    return optimiser.minimize(() => tf.mean(tf.square(tf.sub(evaluate(model, input), target))) as tf.Scalar, true)!
  })
  const value = loss.dataSync()[0]
  loss.dispose()
  return value
}

function evaluate({ weights, biases, activation }: Model, input: tf.Tensor2D): tf.Tensor2D {
  let value: tf.Tensor2D = input
  for (let layer = 0; layer < weights.length; layer++) {
    value = tf.add(tf.matMul(value, weights[layer]), biases[layer])
    if (layer + 1 < weights.length) value = activation === 'relu' ? tf.relu(value) : tf.tanh(value)
  }
  return value
}

function readParameters({ weights, biases }: Model, network: NetworkShape): Float32Array {
  const parameters = new Float32Array(parameterCount(network))
  layerPlaces(network).forEach((place, layer) => {
    parameters.set(weights[layer].dataSync(), place.weights)
    parameters.set(biases[layer].dataSync(), place.biases)
  })
  return parameters
}

/** tfjs's own optimisers read their rate at every step, but declare it protected. */
function setRate(optimiser: tf.Optimizer, rate: number): void {
  (optimiser as unknown as { learningRate: number }).learningRate = rate
}

let backend: Promise<boolean> | undefined

/** The WebAssembly backend, on one thread: several would add in a different order every time, and the second core serves. */
function useFastestBackend(): Promise<boolean> {
  backend ??= (async () => {
    const folder = dirname(createRequire(import.meta.url).resolve('@tensorflow/tfjs-backend-wasm/dist/tfjs-backend-wasm.wasm'))
    setWasmPaths(folder + sep)
    setThreadsCount(1)
    if (await tf.setBackend('wasm')) return true
    return tf.setBackend('cpu')
  })()
  return backend
}

const rowsAtATime = 256

function residualsOf(network: NetworkShape, parameters: Float32Array, motion: Rows): Float64Array {
  const pass = createNetworkPass(network, rowsAtATime)
  const theta = Float64Array.from(parameters)
  const inputs = network.sizes[0]
  const joints = network.sizes.at(-1)!
  const residuals = new Float64Array(motion.rows * joints)
  for (let row = 0; row < motion.rows; row += rowsAtATime) {
    const rows = Math.min(rowsAtATime, motion.rows - row)
    const predicted = residuals.subarray(row * joints, (row + rows) * joints)
    forward(pass, theta, motion.x.subarray(row * inputs, (row + rows) * inputs), rows, predicted)
    for (let k = 0; k < predicted.length; k++) predicted[k] = motion.measured[row * joints + k] - predicted[k]
  }
  return residuals
}

function meanSquareOf(network: NetworkShape, parameters: Float32Array, motions: readonly Rows[]): number {
  return meanSquare(motions.map(motion => residualsOf(network, parameters, motion)))
}

function meanSquare(residuals: readonly Float64Array[]): number {
  let sum = 0
  let count = 0
  for (const values of residuals) {
    for (const value of values) sum += value * value
    count += values.length
  }
  return sum / count
}

function metricsOf(motions: readonly Motion[], residuals: readonly Float64Array[], outputStd: readonly number[]): FitMetrics {
  const joints = outputStd.length
  const rmseOf = (tables: readonly Float64Array[]) => outputStd.map((std, joint) => {
    let sum = 0
    let count = 0
    for (const table of tables) for (let k = joint; k < table.length; k += joints, count++) sum += table[k] * table[k]
    return std * Math.sqrt(sum / count)
  })
  return {
    heldOutError: meanSquare(residuals),
    rmse: rmseOf(residuals),
    motions: motions.map(({ name, rows }, index) => ({ name, rows, rmse: rmseOf([residuals[index]]) })),
  }
}

function joinRows(motions: readonly NormalisedMotion[]): Rows {
  return {
    rows: motions.reduce((sum, motion) => sum + motion.rows, 0),
    x: concatenate(motions.map(motion => motion.x)),
    measured: concatenate(motions.map(motion => motion.measured)),
  }
}

function concatenate(arrays: readonly Float64Array[]): Float64Array {
  const joined = new Float64Array(arrays.reduce((sum, array) => sum + array.length, 0))
  let at = 0
  for (const array of arrays) {
    joined.set(array, at)
    at += array.length
  }
  return joined
}

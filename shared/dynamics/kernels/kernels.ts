import type { LossName, LossShape } from '../losses/index.ts'
import { firstTrainedLayer, type NetworkShape } from '../network.ts'
import { checkLength, ShapeError } from '../shape-error.ts'
import type { CoverageStatistics } from '../version.ts'
import { Arena } from './arena.ts'
import { checkCount, checkRoom, LoadedBatch } from './batch.ts'
import {
  LoadedCoverage, LoadedLoss, LoadedMoments, LoadedNetwork, LoadedNormalisation, lossNetwork, own, type BatchHandle,
  type CoverageHandle, type LossHandle,
  type MomentsHandle, type Motion, type NetworkHandle, type Normalisation, type NormalisationHandle,
} from './handles.ts'
import { layOut, padded, readBlock, type PaddedNetwork } from './layout.ts'
import { instantiate, type KernelExports } from './module.ts'
import { copyIn, copyOut, Scratch } from './scratch.ts'

export type {
  BatchHandle, CoverageHandle, LossHandle, MomentsHandle, Motion, NetworkHandle, Normalisation, NormalisationHandle,
} from './handles.ts'

/** What of a network is trained. */
export type NetworkScheme = 'all' | 'last_layer'

/** Rows `from` to before `to` of a batch; all of them when left out. */
export interface RowRange {
  readonly from?: number
  readonly to?: number
}

/** How steps are taken. */
export interface StepSettings extends RowRange {
  readonly scheme: NetworkScheme
  /** Consecutive steps of so many rows, in time order; the last one takes what is left. */
  readonly rowsPerStep: number
  /** Step size, positive. */
  readonly rate: number
  /** Adam's state, moved on in place; without it plain gradient descent. */
  readonly moments?: MomentsHandle
}

/** What steps did. */
export interface StepReport {
  /** Number of steps. */
  readonly steps: number
  /** Mean over the rows of the loss, each before the step it was part of. */
  readonly loss: number
  /** Mean norm of the steps' gradients. */
  readonly gradientNorm: number
  /** Mean weight per joint over the rows, each before its step; see `Loss.weights`. */
  readonly weights: Float64Array
}

/** Sizes of an unrolled chain of inner steps; definitions in ../meta-gradient.ts. */
export interface ChainSettings {
  readonly scheme: NetworkScheme
  readonly network: NetworkShape
  readonly loss: LossName
  readonly lossShape: LossShape
  readonly steps: number
  readonly rowsPerStep: number
}

/** A chain in kernel memory: write network and loss, load the batch, run. */
export interface Chain {
  /** θ_0 before a run, θ_K after it. */
  readonly network: NetworkHandle
  readonly loss: LossHandle
  /** K + 1 consecutive batches of rowsPerStep rows. */
  readonly batch: BatchHandle
  /**
   * Runs the steps and differentiates the outer error.
   *
   * @param rate  step size
   * @param gradient  out: derivative with respect to φ, then with respect to ln(rate)
   * @returns the outer error
   */
  run(rate: number, gradient: Float64Array): number
  free(): void
}

/** Rows the kernels work on at a time; the constant of the same name in source/rows.ts. */
const chunkRows = 32

const numbersOfElementary = { exp: 0, tanh: 1, softplus: 2, sigmoid: 3 } as const

/**
 * Instantiates the kernels with a memory of their own. Synchronous, quick after the first time, the same in Node, a worker
 * and a browser (whose content policy must allow 'wasm-unsafe-eval'). Results are the same to the bit in every instance.
 */
export function createKernels(): Kernels {
  return new Kernels(instantiate())
}

/**
 * SIMD kernels in f32 and the memory that networks live in. Handles belong to the instance that made them, and have to be
 * freed. Nothing here is asynchronous, so one instance serves any number of adaptations.
 */
export class Kernels {
  readonly #exports: KernelExports
  readonly #arena: Arena
  readonly #scratch: Scratch
  readonly #descriptions = new Map<string, { layout: PaddedNetwork; address: number }>()

  /** Use createKernels. */
  constructor(exports: KernelExports) {
    this.#exports = exports
    this.#arena = new Arena(exports.memory, exports.heapBase())
    this.#scratch = new Scratch(this.#arena)
  }

  /** Bytes of kernel memory in use, work areas included. */
  get usedBytes(): number {
    return this.#arena.usedBytes
  }

  /**
   * Puts a network's parameters into kernel memory.
   *
   * @param parameters  canonical order, rounded to f32
   * @throws {ShapeError} the shape is not usable or the number of parameters is another
   */
  loadNetwork(shape: NetworkShape, parameters: ArrayLike<number>): NetworkHandle {
    const { layout, address } = this.#describe(shape)
    checkLength('parameters', parameters.length, layout.parameterCount, `sizes ${shape.sizes.join('-')}`)
    const network = new LoadedNetwork(this.#arena, layout, address)
    network.write(parameters)
    return network
  }

  /** Adam's state before the first step, for networks of this one's shape. */
  createMoments(network: NetworkHandle): MomentsHandle {
    return new LoadedMoments(this.#arena, own(this.#arena, network, LoadedNetwork).layout)
  }

  /**
   * Puts a loss into kernel memory.
   *
   * @param parameters  φ in the order of its kind, rounded to f32
   * @throws {ShapeError} the number of parameters is another
   */
  loadLoss(name: LossName, shape: LossShape, parameters: ArrayLike<number>): LossHandle {
    const network = lossNetwork(name, shape)
    const net = network === undefined ? undefined : this.#describe(network)
    checkLength('parameters', parameters.length, net?.layout.parameterCount ?? 0, `loss ${name}`)
    const loss = new LoadedLoss(this.#arena, name, { ...shape }, net)
    loss.write(parameters)
    return loss
  }

  /**
   * Puts a normalisation into kernel memory.
   *
   * @throws {ShapeError} lengths don't belong together
   * @throws {RangeError} a value is not finite or a standard deviation is not positive
   */
  loadNormalisation(normalisation: Normalisation): NormalisationHandle {
    return new LoadedNormalisation(this.#arena, normalisation)
  }

  /**
   * Puts coverage statistics into kernel memory.
   *
   * @throws {ShapeError} lengths don't belong together
   */
  loadCoverage(statistics: CoverageStatistics): CoverageHandle {
    return new LoadedCoverage(this.#arena, statistics)
  }

  /**
   * An empty batch, to be loaded again and again; it grows with what is loaded.
   *
   * @param inputs  length of an input row (3n); joints: n
   */
  createBatch(inputs: number, joints: number): BatchHandle {
    return new LoadedBatch(this.#arena, this.#exports, this.#scratch, inputs, joints)
  }

  /**
   * Evaluates a network on normalised rows. Row i of many equals row i alone to the bit.
   *
   * @param x  rows × inputs
   * @param out  rows × outputs, overwritten
   * @throws {ShapeError} x or out is too short for the rows
   */
  forward(network: NetworkHandle, x: ArrayLike<number>, rows: number, out: Float32Array): Float32Array {
    const { layout, description, address } = own(this.#arena, network, LoadedNetwork)
    const inputCount = rows * layout.inputs
    const outputCount = rows * layout.outputs
    checkCount(rows)
    checkRoom('x', x.length, inputCount)
    checkRoom('out', out.length, outputCount)
    const xAt = this.#scratch.room('x', 4 * inputCount)
    const yAt = this.#scratch.room('y', 4 * outputCount)
    const work = this.#workFor(layout)
    copyIn(x, inputCount, this.#arena.f32, xAt / 4)
    this.#exports.predictNormalised(description, address, xAt, layout.inputs, rows, work, yAt, layout.outputs)
    copyOut(this.#arena.f32, yAt / 4, outputCount, out)
    return out
  }

  /**
   * Views that `predict` reads when it is given no motion: fill them, then call it. Spares one copy. Valid until the next
   * other call on the kernels.
   *
   * @param rows  1 or more
   */
  motionArea(joints: number, rows: number): { position: Float64Array; velocity: Float64Array; acceleration: Float64Array } {
    checkCount(rows)
    const count = rows * joints
    const at = this.#scratch.room('motion', 24 * count) / 8
    const { f64 } = this.#arena
    return {
      position: f64.subarray(at, at + count),
      velocity: f64.subarray(at + count, at + 2 * count),
      acceleration: f64.subarray(at + 2 * count, at + 3 * count),
    }
  }

  /**
   * Joint torques of motions, in one call: normalise in f64, evaluate in f32, y · std + mean in f64.
   *
   * @param motion  rows × joints each, in the arm's joint order; left out: what was written into `motionArea(joints, rows)`
   * @param torque  out, rows × joints, N·m (prismatic N)
   * @param cover  statistics to judge the same rows by, and `out`, one value per row: to the bit what `coverageOfRow` gives
   * @throws {ShapeError} an array is too short, or network, normalisation and coverage are of different arms
   */
  predict(
    network: NetworkHandle, normalisation: NormalisationHandle, motion: Motion | undefined, rows: number, torque: Float64Array,
    cover?: { readonly coverage: CoverageHandle; readonly out: Float64Array },
  ): Float64Array {
    const { layout, description, address } = own(this.#arena, network, LoadedNetwork)
    const { joints, address: scales } = own(this.#arena, normalisation, LoadedNormalisation)
    const count = rows * joints
    checkCount(rows)
    checkArm(layout, joints)
    checkRoom('torque', torque.length, count)
    const at = this.#scratch.room('motion', 24 * count)
    const out = this.#scratch.room('torque', 8 * count)
    const work = this.#workFor(layout)
    if (motion !== undefined) {
      checkRoom('position', motion.position.length, count)
      checkRoom('velocity', motion.velocity.length, count)
      checkRoom('acceleration', motion.acceleration.length, count)
      const { f64 } = this.#arena
      copyIn(motion.position, count, f64, at / 8)
      copyIn(motion.velocity, count, f64, at / 8 + count)
      copyIn(motion.acceleration, count, f64, at / 8 + 2 * count)
    }
    this.#exports.predictMotion(description, address, at, at + 8 * count, at + 16 * count, joints, scales, rows, work, out)
    copyOut(this.#arena.f64, out / 8, count, torque)
    if (cover !== undefined) this.#cover(cover.coverage, at, joints, rows, cover.out)
    return torque
  }

  /**
   * Mean squared error of a network per joint on rows of a batch, in base standard deviations, and its predictions.
   *
   * @param squares  out, length joints: mean over the rows of (measured − predicted)², summed in f64
   * @param predicted  out, rows × joints, normalised, if wanted
   * @throws {ShapeError} the network is of another arm, an array is too short, or the range is empty
   */
  errors(
    network: NetworkHandle, batch: BatchHandle, range: RowRange, squares: Float64Array, predicted?: Float32Array,
  ): Float64Array {
    const { layout, description, address } = own(this.#arena, network, LoadedNetwork)
    const rows = this.#rowsOf(batch, range)
    const { x, measured, count, joints, width } = rows
    checkNetwork(layout, rows)
    checkRoom('squares', squares.length, joints)
    if (predicted !== undefined) checkRoom('predicted', predicted.length, count * joints)
    const sums = this.#clearedSums(joints)
    const y = this.#scratch.room('y', count * width)
    const work = this.#workFor(layout)
    this.#exports.squaredErrors(description, address, x, measured, count, work, joints, y, sums)
    for (let joint = 0; joint < joints; joint++) squares[joint] = this.#arena.f64[sums / 8 + joint] / count
    if (predicted !== undefined) this.#gather(y, width, joints, count, predicted)
    return squares
  }

  /**
   * Steps a network through rows of a batch: forward, loss weights, backward and update, all in one call.
   *
   * @param network  changed in place: pass a copy when the step may be refused
   * @throws {ShapeError} network, loss, batch and moments are not of one shape, or the range is empty
   * @throws {RangeError} rate or rowsPerStep is not positive
   */
  step(network: NetworkHandle, loss: LossHandle, batch: BatchHandle, settings: StepSettings): StepReport {
    const { layout, description, address } = own(this.#arena, network, LoadedNetwork)
    const lossHandle = own(this.#arena, loss, LoadedLoss)
    const moments = settings.moments === undefined ? undefined : own(this.#arena, settings.moments, LoadedMoments)
    const rows = this.#rowsOf(batch, settings)
    const { x, measured, count, joints } = rows
    const { rate, rowsPerStep, scheme } = settings
    checkNetwork(layout, rows)
    checkLoss(loss.shape, rows)
    if (moments !== undefined && moments.layout !== layout) throw new ShapeError('The moments are of a network of another shape.')
    if (!(rate > 0)) throw new RangeError(`rate is ${rate}, expected a positive number.`)
    if (!(Number.isInteger(rowsPerStep) && rowsPerStep > 0)) {
      throw new RangeError(`rowsPerStep is ${rowsPerStep}, expected a positive integer.`)
    }
    const sums = this.#clearedSums(8 + 2 * padded(joints))
    const gradient = this.#scratch.room('gradient', 4 * layout.blockCount)
    const work = this.#scratch.room('step', this.#exports.stepWorkBytes(description, lossHandle.address))
    this.#exports.applySteps(
      description, address, lossHandle.address, x, measured, count, rowsPerStep, firstTrainedLayer(layout.shape, scheme), rate,
      moments?.address ?? 0, gradient, work, sums,
    )
    const { f64 } = this.#arena
    const steps = f64[sums / 8 + 2]
    const terms = loss.name === 'unstructured' ? count : count * joints
    return {
      steps,
      loss: f64[sums / 8] / terms,
      gradientNorm: f64[sums / 8 + 1] / steps,
      weights: this.#readWeights(sums, joints, new Float64Array(joints)),
    }
  }

  /**
   * Gradient of a loss over rows of a batch, as one step would take it.
   *
   * @param out  canonical order, overwritten; 0 where the scheme trains nothing
   * @returns the loss
   */
  gradient(
    network: NetworkHandle, loss: LossHandle, batch: BatchHandle, settings: RowRange & { readonly scheme: NetworkScheme },
    out: Float32Array,
  ): number {
    const { layout, description, address } = own(this.#arena, network, LoadedNetwork)
    const lossHandle = own(this.#arena, loss, LoadedLoss)
    const rows = this.#rowsOf(batch, settings)
    const { x, measured, count, joints } = rows
    checkNetwork(layout, rows)
    checkLoss(loss.shape, rows)
    checkLength('out', out.length, layout.parameterCount, 'one value per parameter')
    const sums = this.#clearedSums(8 + 2 * padded(joints))
    const gradient = this.#scratch.room('gradient', 4 * layout.blockCount)
    const work = this.#scratch.room('step', this.#exports.stepWorkBytes(description, lossHandle.address))
    this.#arena.f32.fill(0, gradient / 4, gradient / 4 + layout.blockCount)
    this.#exports.addGradient(
      description, address, lossHandle.address, x, measured, count, firstTrainedLayer(layout.shape, settings.scheme), gradient,
      work, sums,
    )
    readBlock(layout, this.#arena.f32, gradient / 4, out)
    return this.#arena.f64[sums / 8] / (loss.name === 'unstructured' ? count : count * joints)
  }

  /**
   * Mean loss weight of each joint over rows of a batch; see `Loss.weights`.
   *
   * @param network  whose prediction `unstructured` judges; other kinds don't need it
   * @param out  length joints, overwritten
   * @throws {ShapeError} loss, batch and network are not of one arm; or the range is empty
   * @throws {TypeError} `unstructured` without a network
   */
  meanWeights(
    loss: LossHandle, batch: BatchHandle, range: RowRange, out: Float64Array, network?: NetworkHandle,
  ): Float64Array {
    const rows = this.#rowsOf(batch, range)
    checkLoss(loss.shape, rows)
    checkRoom('out', out.length, rows.joints)
    if (loss.name === 'unstructured') {
      if (network === undefined) throw new TypeError('The weights of an unstructured loss depend on a network; give it.')
      const { layout, description, address } = own(this.#arena, network, LoadedNetwork)
      checkNetwork(layout, rows)
      return this.#lossSums(loss, rows, { net: description, parameters: address, predicted: 0, slope: 0 }, out)
    }
    // Weights don't look at the prediction: the measured torque stands in for it, and errors of 0 cost nothing.
    const slope = this.#scratch.room('slope', rows.count * rows.width)
    return this.#lossSums(loss, rows, { net: 0, parameters: 0, predicted: rows.measured, slope }, out)
  }

  /**
   * Slope of a loss in a prediction that is not a network's own, for schemes that add something to it.
   *
   * @param predicted  rows × joints, base standard deviations
   * @param slope  out, rows × joints: ∂L/∂predicted, with the mean over these rows
   * @param weights  out, length joints: mean weights over the rows
   * @throws {ShapeError} an array is too short, or loss and batch are not of one arm
   */
  predictionGradient(
    loss: LossHandle, batch: BatchHandle, range: RowRange, predicted: ArrayLike<number>, slope: Float32Array,
    weights: Float64Array,
  ): void {
    const rows = this.#rowsOf(batch, range)
    const { count, joints, width } = rows
    checkLoss(loss.shape, rows)
    checkRoom('predicted', predicted.length, count * joints)
    checkRoom('slope', slope.length, count * joints)
    checkRoom('weights', weights.length, joints)
    const dense = this.#scratch.room('x', 4 * count * joints)
    const y = this.#scratch.room('predicted', count * width)
    const out = this.#scratch.room('slope', count * width)
    copyIn(predicted, count * joints, this.#arena.f32, dense / 4)
    this.#exports.spread(dense, joints, count, y, width)
    this.#lossSums(loss, rows, { net: 0, parameters: 0, predicted: y, slope: out }, weights)
    this.#gather(out, width, joints, count, slope)
  }

  /**
   * Loss weights of single rows, for showing them.
   *
   * @param range  rows of the batch; their measured torque is not read
   * @param out  rows × joints, overwritten
   * @throws {TypeError} the loss is `unstructured`, which has no weights
   */
  weightsOfRows(loss: LossHandle, batch: BatchHandle, range: RowRange, out: Float32Array): Float32Array {
    if (loss.name === 'unstructured') throw new TypeError('An unstructured loss has no weights.')
    const { address } = own(this.#arena, loss, LoadedLoss)
    const rows = this.#rowsOf(batch, range)
    const { x, xStride, count, joints, width } = rows
    checkLoss(loss.shape, rows)
    checkRoom('out', out.length, count * joints)
    const weights = this.#scratch.room('slope', count * width)
    const work = this.#scratch.room('loss', this.#lossWorkBytes(loss))
    this.#exports.weightsOfRows(address, x, xStride, count, work, weights, width)
    this.#gather(weights, width, joints, count, out)
    return out
  }

  /**
   * Euclidean distance between the parameters of two networks of one shape, summed in f64.
   *
   * @throws {ShapeError} the shapes differ
   */
  distance(one: NetworkHandle, other: NetworkHandle): number {
    const a = own(this.#arena, one, LoadedNetwork)
    const b = own(this.#arena, other, LoadedNetwork)
    if (a.layout !== b.layout) throw new ShapeError('The networks are of different shapes.')
    return Math.sqrt(this.#exports.squaredDistance(a.address, b.address, 4 * a.layout.blockCount))
  }

  /**
   * Room for hypergradients of one chain shape; see kernels/meta-gradient.ts.
   *
   * @throws {ShapeError} network and loss are of different arms, or a size is not usable
   */
  createChain(settings: ChainSettings): Chain {
    const { network: shape, lossShape, steps, rowsPerStep, scheme } = settings
    const inputs = shape.sizes[0]
    const joints = shape.sizes.at(-1)!
    checkCount(steps)
    checkCount(rowsPerStep)
    checkLoss(lossShape, { inputs, joints })
    const { layout, address: description } = this.#describe(shape)
    const network = new LoadedNetwork(this.#arena, layout, description)
    const lossNet = lossNetwork(settings.loss, lossShape)
    const loss = new LoadedLoss(
      this.#arena, settings.loss, { ...lossShape }, lossNet === undefined ? undefined : this.#describe(lossNet),
    )
    const batch = this.createBatch(inputs, joints)
    const from = firstTrainedLayer(shape, scheme)
    const phiGradient = loss.layout === undefined ? undefined : new LoadedNetwork(this.#arena, loss.layout, 0)

    const run = (rate: number, gradient: Float64Array): number => {
      checkLength('gradient', gradient.length, loss.parameterCount + 1, 'φ and the step size')
      const { x, measured, count } = this.#rowsOf(batch, {})
      checkLength('batch', count, (steps + 1) * rowsPerStep, `rows: ${steps} steps and one after them, of ${rowsPerStep}`)
      const bytes = this.#exports.metaGradientWorkBytes(description, loss.address, steps, rowsPerStep)
      const work = this.#scratch.room('chain', bytes)
      const sums = this.#clearedSums(2)
      if (phiGradient !== undefined) {
        this.#arena.f32.fill(0, phiGradient.address / 4, phiGradient.address / 4 + phiGradient.layout.blockCount)
      }
      this.#exports.metaGradient(
        description, network.address, loss.address, x, measured, steps, rowsPerStep, from, rate, work,
        phiGradient?.address ?? 0, sums,
      )
      if (phiGradient !== undefined) readBlock(phiGradient.layout, this.#arena.f32, phiGradient.address / 4, gradient)
      gradient[loss.parameterCount] = this.#arena.f64[sums / 8 + 1]
      return this.#arena.f64[sums / 8]
    }
    const free = () => [network, loss, batch, phiGradient].forEach((handle) => handle?.free())
    return { network, loss, batch, run, free }
  }

  /**
   * The kernels' own exp, tanh, softplus or sigmoid of each value, in f32.
   *
   * @param out  overwritten, as long as values
   */
  elementary(which: keyof typeof numbersOfElementary, values: Float32Array, out: Float32Array): Float32Array {
    checkLength('out', out.length, values.length, 'as long as values')
    const count = Math.ceil(values.length / 4) * 4
    const from = this.#scratch.room('x', 4 * count)
    const to = this.#scratch.room('y', 4 * count)
    copyIn(values, values.length, this.#arena.f32, from / 4)
    this.#exports.elementary(numbersOfElementary[which], from, count, to)
    copyOut(this.#arena.f32, to / 4, values.length, out)
    return out
  }

  /** Coverage of the motion at an address. */
  #cover(coverage: CoverageHandle, motion: number, joints: number, rows: number, out: Float64Array): void {
    const { address, joints: coveredJoints } = own(this.#arena, coverage, LoadedCoverage)
    if (coveredJoints !== joints) throw new ShapeError(`The coverage is of ${coveredJoints} joints, the motion of ${joints}.`)
    checkRoom('coverage', out.length, rows)
    const shares = this.#scratch.room('coverage', 8 * rows)
    const work = this.#scratch.room('coverage work', this.#exports.coverageWorkBytes(3 * joints))
    const bytes = 8 * rows * joints
    this.#exports.coverage(address, motion, motion + bytes, motion + 2 * bytes, joints, rows, work, shares)
    copyOut(this.#arena.f64, shares / 8, rows, out)
  }

  /** One description per shape; there are few shapes, so they are kept. */
  #describe(shape: NetworkShape): { layout: PaddedNetwork; address: number } {
    const key = `${shape.activation} ${shape.sizes.join('-')}`
    let known = this.#descriptions.get(key)
    if (known === undefined) {
      const layout = layOut({ sizes: [...shape.sizes], activation: shape.activation })
      const address = this.#arena.allocate(4 * layout.description.length)
      this.#arena.i32.set(layout.description, address / 4)
      known = { layout, address }
      this.#descriptions.set(key, known)
    }
    return known
  }

  /** Work area for evaluation. */
  #workFor(layout: PaddedNetwork): number {
    return this.#scratch.room('evaluate', 4 * chunkRows * (layout.inputStride + layout.outputStride + 2 * layout.widestStride))
  }

  #rowsOf(batch: BatchHandle, { from = 0, to = batch.rows }: RowRange): Rows {
    const loaded = own(this.#arena, batch, LoadedBatch)
    if (!(Number.isInteger(from) && Number.isInteger(to) && from >= 0 && from < to && to <= batch.rows)) {
      throw new ShapeError(`Rows ${from} to ${to} of a batch of ${batch.rows}: expected a range of at least one row inside it.`)
    }
    const { inputs, joints, xStride, width } = loaded
    return { x: loaded.x(from), measured: loaded.measured(from), count: to - from, inputs, joints, xStride, width }
  }

  #lossSums(
    loss: LossHandle, { x, xStride, measured, width, count, joints }: Rows,
    { net, parameters, predicted, slope }: { net: number; parameters: number; predicted: number; slope: number },
    weights: Float64Array,
  ): Float64Array {
    const { address } = own(this.#arena, loss, LoadedLoss)
    const sums = this.#clearedSums(8 + 2 * padded(joints))
    const bytes = net === 0 ? this.#lossWorkBytes(loss) : this.#exports.stepWorkBytes(net, address)
    const work = this.#scratch.room(net === 0 ? 'loss' : 'step', bytes)
    this.#exports.addLossSums(net, parameters, address, x, xStride, measured, predicted, width, count, work, slope, sums)
    return this.#readWeights(sums, joints, weights)
  }

  /** Any network of the arm would do to ask for the room a loss needs. */
  #lossWorkBytes(loss: LossHandle): number {
    const { address: net } = this.#describe({ sizes: [loss.shape.inputs, loss.shape.joints], activation: 'relu' })
    return this.#exports.stepWorkBytes(net, own(this.#arena, loss, LoadedLoss).address)
  }

  #clearedSums(count: number): number {
    const at = this.#scratch.room('sums', 8 * count)
    const { f64 } = this.#arena
    for (let k = 0; k < count; k++) f64[at / 8 + k] = 0
    return at
  }

  #readWeights(sums: number, joints: number, out: Float64Array): Float64Array {
    const { f64 } = this.#arena
    const at = sums / 8 + 8
    for (let joint = 0; joint < joints; joint++) {
      const plain = f64[at + padded(joints) + joint]
      out[joint] = plain === 0 ? 1 : f64[at + joint] / plain
    }
    return out
  }

  #gather(from: number, width: number, joints: number, rows: number, out: Float32Array): void {
    const dense = this.#scratch.room('x', 4 * rows * joints)
    this.#exports.gather(from, width, joints, rows, dense)
    copyOut(this.#arena.f32, dense / 4, rows * joints, out)
  }
}

/** Rows of a batch as the kernels are told of them. */
interface Rows {
  readonly x: number
  readonly measured: number
  readonly count: number
  readonly inputs: number
  readonly joints: number
  readonly xStride: number
  readonly width: number
}

function checkArm(layout: PaddedNetwork, joints: number): void {
  if (layout.inputs === 3 * joints && layout.outputs === joints) return
  throw new ShapeError(
    `The network takes ${layout.inputs} inputs and gives ${layout.outputs}; the normalisation is for ${joints} joints, ` +
      `which needs ${3 * joints} and ${joints}.`,
  )
}

function checkNetwork(layout: PaddedNetwork, { inputs, joints }: Rows): void {
  if (layout.inputs === inputs && layout.outputs === joints) return
  throw new ShapeError(
    `The network takes ${layout.inputs} inputs and gives ${layout.outputs}; the batch has ${inputs} and ${joints}.`,
  )
}

function checkLoss(shape: LossShape, { inputs, joints }: { inputs: number; joints: number }): void {
  if (shape.inputs === inputs && shape.joints === joints) return
  throw new ShapeError(
    `The loss is for ${shape.inputs} inputs and ${shape.joints} joints; the rows have ${inputs} and ${joints}.`,
  )
}

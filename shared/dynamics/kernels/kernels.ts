import type { NetworkShape } from '../network.ts'
import { checkLength, ShapeError } from '../shape-error.ts'
import { Arena } from './arena.ts'
import { wasm } from './kernels.generated.ts'
import { layOut, readBlock, writeBlock, type PaddedNetwork } from './layout.ts'

/** Rows the kernels work on at a time; the constant of the same name in source/rows.ts. */
const chunkRows = 32

/** What the WebAssembly module exports; addresses are bytes, row strides are in the network's description. */
interface Exports {
  memory: WebAssembly.Memory
  heapBase(): number
  elementary(which: number, values: number, count: number, out: number): void
  predictNormalised(
    net: number, parameters: number, x: number, inputs: number, rows: number, work: number, y: number, outputs: number,
  ): void
  predictMotion(
    net: number, parameters: number, position: number, velocity: number, acceleration: number, joints: number, scales: number,
    rows: number, work: number, torque: number,
  ): void
}

/** A network's parameters in kernel memory. Free it when it is no longer needed: nothing else will. */
export interface NetworkHandle {
  readonly shape: NetworkShape
  /** Number of canonical parameters. */
  readonly parameterCount: number
  /** The parameters in canonical order, to the bit. */
  read(out?: Float32Array): Float32Array
  /** Replaces the parameters. @throws {ShapeError} not `parameterCount` values */
  write(parameters: ArrayLike<number>): void
  /** Another handle with the same parameters. */
  clone(): NetworkHandle
  /** Takes over the parameters of a network of the same shape. @throws {ShapeError} the shape differs */
  copyFrom(other: NetworkHandle): void
  /** Gives the memory back. Using the handle afterwards throws. */
  free(): void
}

/** What turns motions into network inputs and outputs into torques; n joints. */
export interface Normalisation {
  /** 3n: position, velocity, acceleration; rad, rad/s, rad/s² (prismatic m, m/s, m/s²). */
  readonly inputMean: ArrayLike<number>
  readonly inputStd: ArrayLike<number>
  /** n, N·m (prismatic N). */
  readonly outputMean: ArrayLike<number>
  readonly outputStd: ArrayLike<number>
}

/** A normalisation in kernel memory. */
export interface NormalisationHandle {
  readonly joints: number
  free(): void
}

/** Where a caller writes f64 motions, to spare a copy: rows × joints each. Valid until the next call on the kernels. */
export interface MotionArea {
  readonly position: Float64Array
  readonly velocity: Float64Array
  readonly acceleration: Float64Array
}

const kindsOfElementary = { exp: 0, tanh: 1, softplus: 2, sigmoid: 3 } as const

let compiled: WebAssembly.Module | undefined

/**
 * Instantiates the kernels with a memory of their own. Synchronous, quick after the first time, the same in Node, a worker
 * and a browser (whose content policy must allow 'wasm-unsafe-eval'). Results are the same to the bit in every instance.
 */
export function createKernels(): Kernels {
  compiled ??= new WebAssembly.Module(Uint8Array.from(atob(wasm), (character) => character.charCodeAt(0)))
  return new Kernels(new WebAssembly.Instance(compiled, {}).exports as unknown as Exports)
}

/** SIMD kernels in f32 and the memory that networks live in. Handles of one instance cannot be used with another. */
export class Kernels {
  readonly #exports: Exports
  readonly #arena: Arena
  readonly #descriptions = new Map<string, { layout: PaddedNetwork; address: number }>()
  /** Scratch areas, by use; grown when a call needs more. */
  readonly #scratch = new Map<string | PaddedNetwork, { address: number; bytes: number }>()

  /** @internal use createKernels */
  constructor(exports: Exports) {
    this.#exports = exports
    this.#arena = new Arena(exports.memory, exports.heapBase())
  }

  /** Bytes of kernel memory in use. */
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
    return new LoadedNetwork(this.#arena, layout, address, parameters)
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
   * Evaluates a network on normalised rows. Row i of many equals row i alone to the bit.
   *
   * @param x  rows × inputs
   * @param out  rows × outputs, overwritten
   * @throws {ShapeError} x or out is too short for the rows
   */
  forward(network: NetworkHandle, x: ArrayLike<number>, rows: number, out: Float32Array): Float32Array {
    const { layout, description, address } = loaded(network)
    checkCount(rows)
    checkRoom('x', x.length, rows * layout.inputs)
    checkRoom('out', out.length, rows * layout.outputs)
    const inputCount = rows * layout.inputs
    const outputCount = rows * layout.outputs
    const xAt = this.#room('x', 4 * inputCount)
    const yAt = this.#room('y', 4 * outputCount)
    const work = this.#workFor(layout)
    this.#arena.f32.set(x.length === inputCount ? x : slice(x, inputCount), xAt / 4)
    this.#exports.predictNormalised(description, address, xAt, layout.inputs, rows, work, yAt, layout.outputs)
    copyOut(this.#arena.f32, yAt / 4, outputCount, out)
    return out
  }

  /**
   * Views that `predict` and its like read when they are given no arrays: fill them, then call. Spares one copy.
   *
   * @param rows  1 or more
   */
  motionArea(joints: number, rows: number): MotionArea {
    checkCount(rows)
    const count = rows * joints
    const at = this.#room('motion', 24 * count) / 8
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
   * @throws {ShapeError} an array is too short, or network and normalisation are of different arms
   */
  predict(
    network: NetworkHandle,
    normalisation: NormalisationHandle,
    motion: { position: ArrayLike<number>; velocity: ArrayLike<number>; acceleration: ArrayLike<number> } | undefined,
    rows: number,
    torque: Float64Array,
  ): Float64Array {
    const { layout, description, address } = loaded(network)
    const { joints, address: scales } = loadedNormalisation(normalisation)
    checkCount(rows)
    checkArm(layout, joints)
    const count = rows * joints
    checkRoom('torque', torque.length, count)
    const at = this.#room('motion', 24 * count)
    const out = this.#room('torque', 8 * count)
    const work = this.#workFor(layout)
    if (motion !== undefined) this.#writeMotion(motion, count, at)
    this.#exports.predictMotion(
      description, address, at, at + 8 * count, at + 16 * count, joints, scales, rows, work, out,
    )
    copyOut(this.#arena.f64, out / 8, count, torque)
    return torque
  }

  /**
   * The kernels' own exp, tanh, softplus or sigmoid of each value, in f32.
   *
   * @param out  overwritten, as long as values
   */
  elementary(which: keyof typeof kindsOfElementary, values: Float32Array, out: Float32Array): Float32Array {
    checkLength('out', out.length, values.length, 'as long as values')
    const count = Math.ceil(values.length / 4) * 4
    const from = this.#room('x', 4 * count)
    const to = this.#room('y', 4 * count)
    this.#arena.f32.set(values, from / 4)
    this.#exports.elementary(kindsOfElementary[which], from, count, to)
    copyOut(this.#arena.f32, to / 4, values.length, out)
    return out
  }

  #writeMotion(
    motion: { position: ArrayLike<number>; velocity: ArrayLike<number>; acceleration: ArrayLike<number> },
    count: number,
    at: number,
  ): void {
    const { f64 } = this.#arena
    let to = at / 8
    for (const part of ['position', 'velocity', 'acceleration'] as const) {
      const values = motion[part]
      checkRoom(part, values.length, count)
      if (count <= 64) for (let k = 0; k < count; k++) f64[to + k] = values[k]
      else f64.set(values.length === count ? values : slice(values, count), to)
      to += count
    }
  }

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

  /** Scratch for evaluation. One per layout: its padding was zero when made and the kernels write only beside it. */
  #workFor(layout: PaddedNetwork): number {
    const bytes = 4 * chunkRows * (layout.inputStride + layout.outputStride + 2 * layout.widestStride)
    return this.#room(layout, bytes)
  }

  /** A scratch area of at least `bytes`; what it held is lost when it has to grow. */
  #room(use: string | PaddedNetwork, bytes: number): number {
    const known = this.#scratch.get(use)
    if (known !== undefined && known.bytes >= bytes) return known.address
    if (known !== undefined) this.#arena.free(known.address)
    const size = Math.max(4096, 2 ** Math.ceil(Math.log2(bytes)))
    const address = this.#arena.allocate(size)
    this.#scratch.set(use, { address, bytes: size })
    return address
  }
}

class LoadedNetwork implements NetworkHandle {
  readonly layout: PaddedNetwork
  readonly description: number
  readonly #arena: Arena
  #address: number

  constructor(arena: Arena, layout: PaddedNetwork, description: number, parameters: ArrayLike<number> | undefined) {
    this.#arena = arena
    this.layout = layout
    this.description = description
    this.#address = arena.allocate(4 * layout.blockCount)
    if (parameters !== undefined) writeBlock(layout, parameters, arena.f32, this.#address / 4)
  }

  get address(): number {
    if (this.#address === 0) throw new Error('This network was freed.')
    return this.#address
  }

  get shape(): NetworkShape {
    return this.layout.shape
  }

  get parameterCount(): number {
    return this.layout.parameterCount
  }

  read(out = new Float32Array(this.layout.parameterCount)): Float32Array {
    checkLength('out', out.length, this.layout.parameterCount, 'one value per parameter')
    readBlock(this.layout, this.#arena.f32, this.address / 4, out)
    return out
  }

  write(parameters: ArrayLike<number>): void {
    checkLength('parameters', parameters.length, this.layout.parameterCount, `sizes ${this.shape.sizes.join('-')}`)
    writeBlock(this.layout, parameters, this.#arena.f32, this.address / 4)
  }

  clone(): NetworkHandle {
    const copy = new LoadedNetwork(this.#arena, this.layout, this.description, undefined)
    copy.copyFrom(this)
    return copy
  }

  copyFrom(other: NetworkHandle): void {
    const from = loaded(other)
    if (from.layout !== this.layout) {
      throw new ShapeError(`The other network has sizes ${other.shape.sizes.join('-')}, this one ${this.shape.sizes.join('-')}.`)
    }
    const start = from.address / 4
    this.#arena.f32.copyWithin(this.address / 4, start, start + this.layout.blockCount)
  }

  free(): void {
    this.#arena.free(this.address)
    this.#address = 0
  }
}

class LoadedNormalisation implements NormalisationHandle {
  readonly joints: number
  readonly #arena: Arena
  #address: number

  constructor(arena: Arena, { inputMean, inputStd, outputMean, outputStd }: Normalisation) {
    const joints = outputMean.length
    checkLength('outputStd', outputStd.length, joints, `${joints} joints`)
    checkLength('inputMean', inputMean.length, 3 * joints, `${joints} joints`)
    checkLength('inputStd', inputStd.length, 3 * joints, `${joints} joints`)
    checkScales('input', inputMean, inputStd)
    checkScales('output', outputMean, outputStd)
    this.joints = joints
    this.#arena = arena
    this.#address = arena.allocate(8 * 8 * joints)
    const at = this.#address / 8
    arena.f64.set(inputMean, at)
    arena.f64.set(inputStd, at + 3 * joints)
    arena.f64.set(outputMean, at + 6 * joints)
    arena.f64.set(outputStd, at + 7 * joints)
  }

  get address(): number {
    if (this.#address === 0) throw new Error('This normalisation was freed.')
    return this.#address
  }

  free(): void {
    this.#arena.free(this.address)
    this.#address = 0
  }
}

function loaded(network: NetworkHandle): LoadedNetwork {
  if (!(network instanceof LoadedNetwork)) throw new TypeError('Not a network that kernels.loadNetwork returned.')
  return network
}

function loadedNormalisation(normalisation: NormalisationHandle): LoadedNormalisation {
  if (!(normalisation instanceof LoadedNormalisation)) {
    throw new TypeError('Not a normalisation that kernels.loadNormalisation returned.')
  }
  return normalisation
}

function checkScales(what: string, means: ArrayLike<number>, stds: ArrayLike<number>): void {
  for (let k = 0; k < means.length; k++) {
    if (!Number.isFinite(means[k])) throw new RangeError(`${what}Mean: value ${k} is ${means[k]}, expected a finite number.`)
    if (!(stds[k] > 0 && Number.isFinite(stds[k]))) {
      throw new RangeError(`${what}Std: value ${k} is ${stds[k]}, expected a positive number.`)
    }
  }
}

function checkArm(layout: PaddedNetwork, joints: number): void {
  if (layout.inputs === 3 * joints && layout.outputs === joints) return
  throw new ShapeError(
    `The network takes ${layout.inputs} inputs and gives ${layout.outputs}; the normalisation is for ${joints} joints, ` +
      `which needs ${3 * joints} and ${joints}.`,
  )
}

function checkCount(rows: number): void {
  if (!Number.isInteger(rows) || rows < 1) throw new ShapeError(`${rows} rows, expected a positive integer.`)
}

function checkRoom(what: string, found: number, needed: number): void {
  if (found < needed) throw new ShapeError(`${what} has ${found} values, needs at least ${needed}.`)
}

function slice(values: ArrayLike<number>, count: number): ArrayLike<number> {
  return ArrayBuffer.isView(values) ? (values as Float64Array).subarray(0, count) : Array.prototype.slice.call(values, 0, count)
}

/** A view costs more than copying a few values one by one. */
function copyOut<T extends Float32Array | Float64Array>(memory: T, at: number, count: number, out: T): void {
  if (count <= 64) for (let k = 0; k < count; k++) out[k] = memory[at + k]
  else out.set(memory.subarray(at, at + count))
}

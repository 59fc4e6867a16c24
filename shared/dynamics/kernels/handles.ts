import type { LossName, LossShape } from '../losses/index.ts'
import type { NetworkShape } from '../network.ts'
import { checkLength, ShapeError } from '../shape-error.ts'
import type { CoverageStatistics } from '../version.ts'
import type { Arena } from './arena.ts'
import { readBlock, writeBlock, type PaddedNetwork } from './layout.ts'

/** A network's parameters in kernel memory. Free it when it is no longer needed: nothing else will. */
export interface NetworkHandle {
  readonly shape: NetworkShape
  /** Number of canonical parameters. */
  readonly parameterCount: number
  /** The parameters in canonical order, to the bit. @throws {ShapeError} out has another length */
  read(out?: Float32Array): Float32Array
  /** Replaces the parameters. @throws {ShapeError} not `parameterCount` values */
  write(parameters: ArrayLike<number>): void
  /** Another handle with the same parameters. */
  clone(): NetworkHandle
  /** Takes over the parameters of a network of the same shape; a plain copy of memory. @throws {ShapeError} the shape differs */
  copyFrom(other: NetworkHandle): void
  /** Gives the memory back. Using the handle afterwards throws. */
  free(): void
}

/** Adam's state for one network: β1ᵗ, β2ᵗ, m, v. */
export interface MomentsHandle {
  /** β1ᵗ, β2ᵗ, then m and v in canonical order: the state of `updates/adam.ts`. Exact: m and v are f32. */
  read(): Float64Array
  /** @throws {ShapeError} not 2 + 2 · parameters values */
  write(state: ArrayLike<number>): void
  /** Takes over the state for a network of the same shape. @throws {ShapeError} the shape differs */
  copyFrom(other: MomentsHandle): void
  free(): void
}

/** A loss's parameters φ in kernel memory. */
export interface LossHandle {
  readonly name: LossName
  readonly shape: LossShape
  readonly parameterCount: number
  /** φ in the order of its kind. */
  read(): Float32Array
  /** @throws {ShapeError} not `parameterCount` values */
  write(parameters: ArrayLike<number>): void
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

/** Coverage statistics in kernel memory. */
export interface CoverageHandle {
  readonly joints: number
  free(): void
}

/** Rows × joints each, SI units, row-major. */
export interface Motion {
  readonly position: ArrayLike<number>
  readonly velocity: ArrayLike<number>
  readonly acceleration: ArrayLike<number>
}

/** Normalised rows in kernel memory, with what was measured there: what errors, weights and steps are computed on. */
export interface BatchHandle {
  readonly inputs: number
  readonly joints: number
  /** Rows loaded last. */
  readonly rows: number
  /**
   * Loads measured motion: normalised in f64, kept in f32.
   *
   * @param torque  rows × joints, N·m (prismatic N)
   * @throws {ShapeError} an array is too short, or the normalisation is of another number of joints
   */
  load(normalisation: NormalisationHandle, motion: Motion, torque: ArrayLike<number>, rows: number): void
  /**
   * Loads rows that are normalised already.
   *
   * @param x  rows × inputs; measured: rows × joints, base standard deviations
   * @throws {ShapeError} an array is too short
   */
  loadNormalised(x: ArrayLike<number>, measured: ArrayLike<number>, rows: number): void
  free(): void
}

/** A block of the arena that says so when it is used after being freed. */
class Block {
  readonly #arena: Arena
  readonly #what: string
  #address: number

  constructor(arena: Arena, bytes: number, what: string) {
    this.#arena = arena
    this.#what = what
    this.#address = arena.allocate(bytes)
  }

  get address(): number {
    if (this.#address === 0) throw new Error(`This ${this.#what} was freed.`)
    return this.#address
  }

  free(): void {
    this.#arena.free(this.address)
    this.#address = 0
  }
}

export class LoadedNetwork implements NetworkHandle {
  readonly arena: Arena
  readonly layout: PaddedNetwork
  /** Address of the layout's description. */
  readonly description: number
  readonly #block: Block

  constructor(arena: Arena, layout: PaddedNetwork, description: number) {
    this.arena = arena
    this.layout = layout
    this.description = description
    this.#block = new Block(arena, 4 * layout.blockCount, 'network')
  }

  get address(): number {
    return this.#block.address
  }

  get shape(): NetworkShape {
    return this.layout.shape
  }

  get parameterCount(): number {
    return this.layout.parameterCount
  }

  read(out = new Float32Array(this.layout.parameterCount)): Float32Array {
    checkLength('out', out.length, this.layout.parameterCount, 'one value per parameter')
    readBlock(this.layout, this.arena.f32, this.address / 4, out)
    return out
  }

  write(parameters: ArrayLike<number>): void {
    checkLength('parameters', parameters.length, this.layout.parameterCount, `sizes ${this.shape.sizes.join('-')}`)
    writeBlock(this.layout, parameters, this.arena.f32, this.address / 4)
  }

  clone(): NetworkHandle {
    const copy = new LoadedNetwork(this.arena, this.layout, this.description)
    copy.copyFrom(this)
    return copy
  }

  copyFrom(other: NetworkHandle): void {
    const from = own(this.arena, other, LoadedNetwork)
    checkSameLayout(from.layout, this.layout)
    copyValues(this.arena, from.address, this.address, this.layout.blockCount)
  }

  free(): void {
    this.#block.free()
  }
}

/** Bytes before m, as in source/updates.ts. */
const momentsHead = 64

export class LoadedMoments implements MomentsHandle {
  readonly arena: Arena
  readonly layout: PaddedNetwork
  readonly #block: Block

  constructor(arena: Arena, layout: PaddedNetwork) {
    this.arena = arena
    this.layout = layout
    this.#block = new Block(arena, momentsHead + 8 * layout.blockCount, 'state of Adam')
    arena.f64.fill(1, this.address / 8, this.address / 8 + 2)
  }

  get address(): number {
    return this.#block.address
  }

  read(): Float64Array {
    const { parameterCount, blockCount } = this.layout
    const state = new Float64Array(2 + 2 * parameterCount)
    state.set(this.arena.f64.subarray(this.address / 8, this.address / 8 + 2))
    const m = (this.address + momentsHead) / 4
    readBlock(this.layout, this.arena.f32, m, state.subarray(2))
    readBlock(this.layout, this.arena.f32, m + blockCount, state.subarray(2 + parameterCount))
    return state
  }

  write(state: ArrayLike<number>): void {
    const { parameterCount, blockCount } = this.layout
    checkLength('state', state.length, 2 + 2 * parameterCount, 'β1ᵗ, β2ᵗ, m, v')
    this.arena.f64[this.address / 8] = state[0]
    this.arena.f64[this.address / 8 + 1] = state[1]
    const m = (this.address + momentsHead) / 4
    const values = Float64Array.from(state)
    writeBlock(this.layout, values.subarray(2, 2 + parameterCount), this.arena.f32, m)
    writeBlock(this.layout, values.subarray(2 + parameterCount), this.arena.f32, m + blockCount)
  }

  copyFrom(other: MomentsHandle): void {
    const from = own(this.arena, other, LoadedMoments)
    checkSameLayout(from.layout, this.layout)
    copyValues(this.arena, from.address, this.address, momentsHead / 4 + 2 * this.layout.blockCount)
  }

  free(): void {
    this.#block.free()
  }
}

/** Kinds and maps as source/losses.ts numbers them. */
const kindNumbers: Record<LossName, number> = { mse: 0, structured: 1, state_dependent: 2, unstructured: 3 }

/** The network inside a loss, in the parameter order of its kind; none in plain squared error. */
export function lossNetwork(name: LossName, { inputs, joints, hidden }: LossShape): NetworkShape | undefined {
  switch (name) {
    case 'mse':
      return undefined
    case 'structured':
      // Constant weights: a network of no inputs is its bias.
      return { sizes: [0, joints], activation: 'tanh' }
    case 'state_dependent':
      return { sizes: [inputs, hidden, joints], activation: 'tanh' }
    case 'unstructured':
      return { sizes: [2 * joints, hidden, 1], activation: 'tanh' }
  }
}

export class LoadedLoss implements LossHandle {
  readonly arena: Arena
  readonly name: LossName
  readonly shape: LossShape
  /** The layout of its network; undefined in plain squared error. */
  readonly layout: PaddedNetwork | undefined
  readonly #head: Block
  readonly #block: Block | undefined

  constructor(
    arena: Arena, name: LossName, shape: LossShape, net: { layout: PaddedNetwork; address: number } | undefined,
  ) {
    this.arena = arena
    this.name = name
    this.shape = shape
    this.layout = net?.layout
    this.#head = new Block(arena, 20, 'loss')
    this.#block = net === undefined ? undefined : new Block(arena, 4 * net.layout.blockCount, 'loss')
    arena.i32.set(
      [kindNumbers[name], shape.positive === 'softplus' ? 1 : 0, shape.joints, net?.address ?? 0, this.#block?.address ?? 0],
      this.#head.address / 4,
    )
  }

  get address(): number {
    return this.#head.address
  }

  get parameterCount(): number {
    return this.layout?.parameterCount ?? 0
  }

  read(): Float32Array {
    const parameters = new Float32Array(this.parameterCount)
    if (this.#block !== undefined) readBlock(this.layout!, this.arena.f32, this.#block.address / 4, parameters)
    return parameters
  }

  write(parameters: ArrayLike<number>): void {
    checkLength('parameters', parameters.length, this.parameterCount, `loss ${this.name}`)
    if (this.#block !== undefined) writeBlock(this.layout!, parameters, this.arena.f32, this.#block.address / 4)
  }

  free(): void {
    this.#head.free()
    this.#block?.free()
  }
}

export class LoadedNormalisation implements NormalisationHandle {
  readonly arena: Arena
  readonly joints: number
  readonly #block: Block

  constructor(arena: Arena, { inputMean, inputStd, outputMean, outputStd }: Normalisation) {
    const joints = outputMean.length
    checkLength('outputStd', outputStd.length, joints, `${joints} joints`)
    checkLength('inputMean', inputMean.length, 3 * joints, `${joints} joints`)
    checkLength('inputStd', inputStd.length, 3 * joints, `${joints} joints`)
    checkScales('input', inputMean, inputStd)
    checkScales('output', outputMean, outputStd)
    this.arena = arena
    this.joints = joints
    this.#block = new Block(arena, 8 * 8 * joints, 'normalisation')
    const at = this.address / 8
    arena.f64.set(inputMean, at)
    arena.f64.set(inputStd, at + 3 * joints)
    arena.f64.set(outputMean, at + 6 * joints)
    arena.f64.set(outputStd, at + 7 * joints)
  }

  get address(): number {
    return this.#block.address
  }

  /** Address of the output's means and standard deviations. */
  get outputAddress(): number {
    return this.address + 8 * 6 * this.joints
  }

  free(): void {
    this.#block.free()
  }
}

export class LoadedCoverage implements CoverageHandle {
  readonly arena: Arena
  readonly joints: number
  readonly #block: Block

  constructor(arena: Arena, { low, high, mean, whitening, d99 }: CoverageStatistics) {
    const channels = low.length
    if (channels === 0 || channels % 3 !== 0) throw new ShapeError(`low has ${channels} values, expected 3 per joint.`)
    checkLength('high', high.length, channels, `${channels} channels`)
    checkLength('mean', mean.length, channels, `${channels} channels`)
    checkLength('whitening', whitening.length, (channels * (channels + 1)) / 2, `lower triangle of ${channels} channels`)
    this.arena = arena
    this.joints = channels / 3
    this.#block = new Block(arena, 8 * (1 + 3 * channels + whitening.length), 'coverage')
    arena.f64.set([d99, ...low, ...high, ...mean, ...whitening], this.address / 8)
  }

  get address(): number {
    return this.#block.address
  }

  free(): void {
    this.#block.free()
  }
}

/**
 * Narrows a handle to what this module made of it.
 *
 * @throws {TypeError} it was not made here, or by other kernels: its addresses mean nothing in this memory
 */
export function own<T extends { arena: Arena }>(arena: Arena, handle: object, made: abstract new (...args: never[]) => T): T {
  if (!(handle instanceof made) || handle.arena !== arena) throw new TypeError('This handle belongs to other kernels.')
  return handle
}

function checkSameLayout(found: PaddedNetwork, expected: PaddedNetwork): void {
  if (found === expected) return
  throw new ShapeError(`The other network has sizes ${found.shape.sizes.join('-')}, this one ${expected.shape.sizes.join('-')}.`)
}

function copyValues(arena: Arena, from: number, to: number, count: number): void {
  arena.f32.copyWithin(to / 4, from / 4, from / 4 + count)
}

function checkScales(what: string, means: ArrayLike<number>, stds: ArrayLike<number>): void {
  for (let k = 0; k < means.length; k++) {
    if (!Number.isFinite(means[k])) throw new RangeError(`${what}Mean: value ${k} is ${means[k]}, expected a finite number.`)
    if (!(stds[k] > 0 && Number.isFinite(stds[k]))) {
      throw new RangeError(`${what}Std: value ${k} is ${stds[k]}, expected a positive number.`)
    }
  }
}

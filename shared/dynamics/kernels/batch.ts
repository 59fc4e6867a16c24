import { ShapeError } from '../shape-error.ts'
import type { Arena } from './arena.ts'
import { LoadedNormalisation, own, type BatchHandle, type Motion, type NormalisationHandle } from './handles.ts'
import { padded } from './layout.ts'
import type { KernelExports } from './module.ts'
import { copyIn, type Scratch } from './scratch.ts'

export class LoadedBatch implements BatchHandle {
  readonly arena: Arena
  readonly inputs: number
  readonly joints: number
  /** Bytes of a padded row. */
  readonly xStride: number
  readonly width: number
  rows = 0
  readonly #exports: KernelExports
  readonly #scratch: Scratch
  #address = 0
  #capacity = 0
  #isFreed = false

  constructor(arena: Arena, exports: KernelExports, scratch: Scratch, inputs: number, joints: number) {
    this.arena = arena
    this.#exports = exports
    this.#scratch = scratch
    this.inputs = inputs
    this.joints = joints
    this.xStride = 4 * padded(inputs)
    this.width = 4 * padded(joints)
  }

  /** Address of a row's inputs. */
  x(row: number): number {
    this.#checkAlive()
    return this.#address + row * this.xStride
  }

  /** Address of a row's measured torque. */
  measured(row: number): number {
    this.#checkAlive()
    return this.#address + this.#capacity * this.xStride + row * this.width
  }

  load(normalisation: NormalisationHandle, motion: Motion, torque: ArrayLike<number>, rows: number): void {
    const scales = own(this.arena, normalisation, LoadedNormalisation)
    const { joints } = this
    if (scales.joints !== joints || this.inputs !== 3 * joints) {
      throw new ShapeError(`The batch has ${this.inputs} inputs and ${joints} joints, the normalisation ${scales.joints} joints.`)
    }
    const count = rows * joints
    this.#reserve(rows)
    const at = this.#scratch.room('motion', 32 * count)
    const { f64 } = this.arena
    const parts = [motion.position, motion.velocity, motion.acceleration, torque]
    const names = ['position', 'velocity', 'acceleration', 'torque']
    parts.forEach((values, part) => {
      checkRoom(names[part], values.length, count)
      copyIn(values, count, f64, at / 8 + part * count)
    })
    const bytes = 8 * count
    this.#exports.normaliseMotion(
      at, at + bytes, at + 2 * bytes, scales.address, joints, rows, this.x(0), this.xStride,
    )
    this.#exports.normalise(at + 3 * bytes, scales.outputAddress, joints, rows, this.measured(0), this.width)
    this.rows = rows
  }

  loadNormalised(x: ArrayLike<number>, measured: ArrayLike<number>, rows: number): void {
    checkRoom('x', x.length, rows * this.inputs)
    checkRoom('measured', measured.length, rows * this.joints)
    this.#reserve(rows)
    const at = this.#scratch.room('x', 4 * rows * Math.max(this.inputs, this.joints))
    copyIn(x, rows * this.inputs, this.arena.f32, at / 4)
    this.#exports.spread(at, this.inputs, rows, this.x(0), this.xStride)
    copyIn(measured, rows * this.joints, this.arena.f32, at / 4)
    this.#exports.spread(at, this.joints, rows, this.measured(0), this.width)
    this.rows = rows
  }

  free(): void {
    this.#checkAlive()
    if (this.#capacity > 0) this.arena.free(this.#address)
    this.#isFreed = true
  }

  #reserve(rows: number): void {
    this.#checkAlive()
    checkCount(rows)
    if (rows <= this.#capacity) return
    if (this.#capacity > 0) this.arena.free(this.#address)
    const capacity = Math.max(16, 2 ** Math.ceil(Math.log2(rows)))
    this.#address = this.arena.allocate(capacity * (this.xStride + this.width))
    this.#capacity = capacity
  }

  #checkAlive(): void {
    if (this.#isFreed) throw new Error('This batch was freed.')
  }
}

/** @throws {ShapeError} rows is not a positive integer */
export function checkCount(rows: number): void {
  if (!Number.isInteger(rows) || rows < 1) throw new ShapeError(`${rows} rows, expected a positive integer.`)
}

/** @throws {ShapeError} an array is too short */
export function checkRoom(what: string, found: number, needed: number): void {
  if (found < needed) throw new ShapeError(`${what} has ${found} values, needs at least ${needed}.`)
}

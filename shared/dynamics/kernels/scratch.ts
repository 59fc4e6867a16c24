import type { Arena } from './arena.ts'

/** Work areas that calls share, one per use, grown when a call needs more. What an area held is lost when it grows. */
export class Scratch {
  readonly #arena: Arena
  readonly #areas = new Map<string, { address: number; bytes: number }>()

  constructor(arena: Arena) {
    this.#arena = arena
  }

  /** Address of an area of at least `bytes`, the same one for the same use. */
  room(use: string, bytes: number): number {
    const known = this.#areas.get(use)
    if (known !== undefined && known.bytes >= bytes) return known.address
    if (known !== undefined) this.#arena.free(known.address)
    const size = Math.max(4096, 2 ** Math.ceil(Math.log2(bytes)))
    const address = this.#arena.allocate(size)
    this.#areas.set(use, { address, bytes: size })
    return address
  }
}

/** Copies values into memory. Setting a view of another type, or a view at all, costs more than a few single stores. */
export function copyIn(values: ArrayLike<number>, count: number, memory: Float32Array | Float64Array, at: number): void {
  if (count <= 64) for (let k = 0; k < count; k++) memory[at + k] = values[k]
  else if (values.length === count) memory.set(values, at)
  else if (ArrayBuffer.isView(values)) memory.set((values as Float64Array).subarray(0, count), at)
  else for (let k = 0; k < count; k++) memory[at + k] = values[k]
}

/** Copies values out of memory, likewise. */
export function copyOut(memory: Float32Array | Float64Array, at: number, count: number, out: Float32Array | Float64Array): void {
  if (count <= 64) for (let k = 0; k < count; k++) out[k] = memory[at + k]
  else out.set(memory.subarray(at, at + count))
}

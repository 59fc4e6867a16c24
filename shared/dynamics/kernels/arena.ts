/** WebAssembly pages are 64 KiB. */
const pageBytes = 65536

/**
 * Blocks of one WebAssembly.Memory, allocated and freed explicitly. Sizes are rounded up to classes at most an eighth
 * apart and freed blocks are handed out again within their class; the memory itself grows and never shrinks.
 *
 * The views are replaced when the memory grows: read them from the arena each time, don't keep them over an allocation.
 */
export class Arena {
  f32!: Float32Array
  f64!: Float64Array
  i32!: Int32Array
  /** Bytes handed out and not freed. */
  usedBytes = 0
  readonly #memory: WebAssembly.Memory
  readonly #free = new Map<number, number[]>()
  readonly #sizes = new Map<number, number>()
  #end: number

  /** @param base  first address the module itself does not use */
  constructor(memory: WebAssembly.Memory, base: number) {
    this.#memory = memory
    this.#end = Math.ceil(base / 64) * 64
    this.#renewViews()
  }

  /**
   * A block of zeros at a multiple of 64.
   *
   * @throws {RangeError} the memory cannot grow to hold it (4 GiB at most)
   */
  allocate(bytes: number): number {
    const size = sizeClass(bytes)
    let address = this.#free.get(size)?.pop()
    if (address === undefined) {
      address = this.#end
      const missing = address + size - this.#memory.buffer.byteLength
      if (missing > 0) {
        // At least an eighth more each time, so that a thousand small blocks don't grow it a thousand times.
        const wanted = Math.max(missing, Math.min(this.#memory.buffer.byteLength / 8, 64 * 1024 * 1024))
        this.#memory.grow(Math.ceil(wanted / pageBytes))
        this.#renewViews()
      }
      this.#end = address + size
    }
    this.#sizes.set(address, size)
    this.usedBytes += size
    this.i32.fill(0, address / 4, (address + size) / 4)
    return address
  }

  /** @throws {Error} the address is not one that is handed out: freed twice, or never allocated here */
  free(address: number): void {
    const size = this.#sizes.get(address)
    if (size === undefined) throw new Error('This block of kernel memory was freed before, or belongs to other kernels.')
    this.#sizes.delete(address)
    this.usedBytes -= size
    const list = this.#free.get(size)
    if (list === undefined) this.#free.set(size, [address])
    else list.push(address)
  }

  #renewViews(): void {
    const { buffer } = this.#memory
    this.f32 = new Float32Array(buffer)
    this.f64 = new Float64Array(buffer)
    this.i32 = new Int32Array(buffer)
  }
}

function sizeClass(bytes: number): number {
  const least = Math.max(64, Math.ceil(bytes / 64) * 64)
  if (least <= 1024) return least
  const step = 2 ** (Math.floor(Math.log2(least)) - 3)
  return Math.ceil(least / step) * step
}

import { wasm } from './kernels.generated.ts'

/** What the WebAssembly module exports; see source/ for what each does. Addresses, strides and widths are bytes. */
export interface KernelExports {
  readonly memory: WebAssembly.Memory
  heapBase(): number
  elementary(which: number, values: number, count: number, out: number): void
  predictNormalised(
    net: number, parameters: number, x: number, inputs: number, rows: number, work: number, y: number, outputs: number,
  ): void
  predictMotion(
    net: number, parameters: number, position: number, velocity: number, acceleration: number, joints: number, scales: number,
    rows: number, work: number, torque: number,
  ): void
  coverageWorkBytes(channels: number): number
  coverage(
    statistics: number, position: number, velocity: number, acceleration: number, joints: number, rows: number, work: number,
    out: number,
  ): void
  spread(dense: number, width: number, rows: number, padded: number, stride: number): void
  gather(padded: number, stride: number, width: number, rows: number, dense: number): void
  normalise(dense: number, scales: number, width: number, rows: number, padded: number, stride: number): void
  normaliseMotion(
    position: number, velocity: number, acceleration: number, scales: number, joints: number, rows: number, x: number,
    stride: number,
  ): void
  stepWorkBytes(net: number, loss: number): number
  addGradient(
    net: number, parameters: number, loss: number, x: number, measured: number, rows: number, from: number, gradient: number,
    work: number, sums: number,
  ): void
  applySteps(
    net: number, parameters: number, loss: number, x: number, measured: number, rows: number, rowsPerStep: number, from: number,
    rate: number, moments: number, gradient: number, work: number, sums: number,
  ): void
  addLossSums(
    net: number, parameters: number, loss: number, x: number, xStride: number, measured: number, predicted: number, width: number,
    rows: number, work: number, slope: number, sums: number,
  ): void
  weightsOfRows(
    loss: number, x: number, xStride: number, rows: number, work: number, weights: number, width: number,
  ): void
  squaredErrors(
    net: number, parameters: number, x: number, measured: number, rows: number, work: number, joints: number, predicted: number,
    sums: number,
  ): void
  squaredDistance(a: number, b: number, bytes: number): number
  metaGradientWorkBytes(net: number, loss: number, steps: number, rowsPerStep: number): number
  metaGradient(
    net: number, theta: number, loss: number, x: number, measured: number, steps: number, rowsPerStep: number, from: number,
    rate: number, work: number, phiGradient: number, sums: number,
  ): void
}

let compiled: WebAssembly.Module | undefined

/** An instance with a memory of its own; compiled once per process. */
export function instantiate(): KernelExports {
  compiled ??= new WebAssembly.Module(Uint8Array.from(atob(wasm), (character) => character.charCodeAt(0)))
  return new WebAssembly.Instance(compiled, {}).exports as unknown as KernelExports
}

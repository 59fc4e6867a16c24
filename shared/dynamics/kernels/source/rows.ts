import { evaluate, inputStride, outputStride } from './network'

// Rows on their way in and out: callers hand over dense rows, the kernels work on rows padded to a multiple of 8 values.

/** Most rows worked on at a time: their activations stay in the first-level cache. */
export const chunkRows: i32 = 32

/** A loop: memory.copy leaves the compiled code, which costs more than these few values. */
// @ts-ignore: decorator
@inline
function copyRow(from: usize, to: usize, bytes: usize): void {
  for (let at: usize = 0; at < bytes; at += 4) store<u32>(to + at, load<u32>(from + at))
}

/** Zeros the last eight values of a padded row, which hold its padding; what belongs there is written after. */
// @ts-ignore: decorator
@inline
function clearEnd(padded: usize, stride: usize): void {
  v128.store(padded + stride - 32, f32x4.splat(0))
  v128.store(padded + stride - 16, f32x4.splat(0))
}

/** Dense f32 rows → padded rows. */
export function spread(dense: usize, width: i32, rows: i32, padded: usize, stride: usize): void {
  const bytes = <usize>width << 2
  for (let row = 0; row < rows; row++) {
    clearEnd(padded, stride)
    copyRow(dense, padded, bytes)
    dense += bytes
    padded += stride
  }
}

/** Padded rows → dense f32 rows. */
export function gather(padded: usize, stride: usize, width: i32, rows: i32, dense: usize): void {
  const bytes = <usize>width << 2
  for (let row = 0; row < rows; row++) {
    copyRow(padded, dense, bytes)
    dense += bytes
    padded += stride
  }
}

/** One part of an input row: (value − mean) / std in f64, then rounded to f32. */
// @ts-ignore: decorator
@inline
function normalisePart(values: usize, means: usize, stds: usize, width: i32, out: usize): void {
  for (let k = 0; k < width; k++) {
    const at = <usize>k << 3
    store<f32>(out + (<usize>k << 2), <f32>((load<f64>(values + at) - load<f64>(means + at)) / load<f64>(stds + at)))
  }
}

/** Dense f64 rows, normalised → padded f32 rows. Scales: `width` means, then as many standard deviations, f64. */
export function normalise(dense: usize, scales: usize, width: i32, rows: i32, padded: usize, stride: usize): void {
  const bytes = <usize>width << 3
  for (let row = 0; row < rows; row++) {
    clearEnd(padded, stride)
    normalisePart(dense, scales, scales + bytes, width, padded)
    dense += bytes
    padded += stride
  }
}

/**
 * Position, velocity and acceleration (f64, rows × joints each) → padded f32 input rows.
 *
 * @param scales  3 · joints means, then 3 · joints standard deviations, f64
 */
export function normaliseMotion(
  position: usize, velocity: usize, acceleration: usize, scales: usize, joints: i32, rows: i32, x: usize, stride: usize,
): void {
  const bytes = <usize>joints << 3
  const stds = scales + 3 * bytes
  for (let row = 0; row < rows; row++) {
    clearEnd(x, stride)
    normalisePart(position, scales, stds, joints, x)
    normalisePart(velocity, scales + bytes, stds + bytes, joints, x + (bytes >> 1))
    normalisePart(acceleration, scales + 2 * bytes, stds + 2 * bytes, joints, x + bytes)
    position += bytes
    velocity += bytes
    acceleration += bytes
    x += stride
  }
}

/** Padded f32 rows → dense f64 rows y · std + mean. Scales as in normalise. */
function denormalise(padded: usize, stride: usize, scales: usize, width: i32, rows: i32, dense: usize): void {
  const bytes = <usize>width << 3
  for (let row = 0; row < rows; row++) {
    for (let k = 0; k < width; k++) {
      const at = <usize>k << 3
      const y = <f64>load<f32>(padded + (<usize>k << 2))
      store<f64>(dense + at, y * load<f64>(scales + bytes + at) + load<f64>(scales + at))
    }
    dense += bytes
    padded += stride
  }
}

/**
 * Dense normalised f32 rows in, dense f32 rows out.
 *
 * @param work  chunkRows × (padded inputs + padded outputs + twice the widest row)
 */
export function predictNormalised(
  net: usize, parameters: usize, x: usize, inputs: i32, rows: i32, work: usize, y: usize, outputs: i32,
): void {
  const xStride = inputStride(net)
  const yStride = outputStride(net)
  const paddedY = work + <usize>chunkRows * xStride
  const between = paddedY + <usize>chunkRows * yStride
  while (rows > 0) {
    const count = min(rows, chunkRows)
    spread(x, inputs, count, work, xStride)
    evaluate(net, parameters, work, count, between, paddedY)
    gather(paddedY, yStride, outputs, count, y)
    x += <usize>(count * inputs) << 2
    y += <usize>(count * outputs) << 2
    rows -= count
  }
}

/**
 * Joint torques of dense f64 motion rows: normalise, evaluate, back to torque.
 *
 * @param scales  input means and standard deviations (3 · joints each), output means and standard deviations (joints each)
 * @param work  as for predictNormalised
 */
export function predictMotion(
  net: usize, parameters: usize, position: usize, velocity: usize, acceleration: usize, joints: i32, scales: usize,
  rows: i32, work: usize, torque: usize,
): void {
  const xStride = inputStride(net)
  const yStride = outputStride(net)
  const paddedY = work + <usize>chunkRows * xStride
  const between = paddedY + <usize>chunkRows * yStride
  const outputScales = scales + (<usize>(6 * joints) << 3)
  while (rows > 0) {
    const count = min(rows, chunkRows)
    normaliseMotion(position, velocity, acceleration, scales, joints, count, work, xStride)
    evaluate(net, parameters, work, count, between, paddedY)
    denormalise(paddedY, yStride, outputScales, joints, count, torque)
    const bytes = <usize>(count * joints) << 3
    position += bytes
    velocity += bytes
    acceleration += bytes
    torque += bytes
    rows -= count
  }
}

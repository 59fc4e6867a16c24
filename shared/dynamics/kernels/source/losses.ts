import { exp4, sigmoid4, softplus4 } from './elementary'
import {
  addBackwardTangent, backward, forward, forwardTangent, inputStride, layerAt, layersOf, outputStride, tapeOffset, tapeStride,
} from './network'

// A loss's layout in memory (32-bit integers), written by kernels.ts:
//   0 kind   4 positive (0 exp, 1 softplus)   8 joints   12 its network's layout   16 its parameters
// `structured` is a network of no inputs: its bias is a. Torques are padded rows of 8 · ⌈joints / 8⌉, their padding zero.

const mse: i32 = 0
const unstructured: i32 = 3

// @ts-ignore: decorator
@inline
export function kindOf(loss: usize): i32 { return load<i32>(loss) }
// @ts-ignore: decorator
@inline
export function hasWeights(loss: usize): bool { return kindOf(loss) != unstructured }
// @ts-ignore: decorator
@inline
export function hasParameters(loss: usize): bool { return kindOf(loss) != mse }
// @ts-ignore: decorator
@inline
export function isSoftplus(loss: usize): bool { return load<i32>(loss, 4) == 1 }
// @ts-ignore: decorator
@inline
export function jointsOf(loss: usize): i32 { return load<i32>(loss, 8) }
// @ts-ignore: decorator
@inline
export function netOf(loss: usize): usize { return <usize>load<u32>(loss, 12) }
// @ts-ignore: decorator
@inline
export function phiOf(loss: usize): usize { return <usize>load<u32>(loss, 16) }

/** What a sum over rows is multiplied by: 2 / (rows · joints) in the slope of squared errors, 1 / rows in `unstructured`. */
export function shareOf(loss: usize, rows: i32): f32 {
  return hasWeights(loss) ? <f32>(2.0 / <f64>(rows * jointsOf(loss))) : <f32>(1.0 / <f64>rows)
}

/** Bytes that keep what a loss's second order needs to know of an evaluation of `rows` rows. */
export function lossTapeBytes(loss: usize, rows: i32): usize {
  if (!hasParameters(loss)) return 0
  const net = netOf(loss)
  const bytes = <usize>rows * tapeStride(net)
  return hasWeights(loss) ? bytes : <usize>rows * 2 * inputStride(net) + 2 * bytes
}

/** The arguments of pos, on the tape of a loss with weights. */
// @ts-ignore: decorator
@inline
export function argumentsOn(loss: usize, tape: usize, rows: i32): usize {
  const net = netOf(loss)
  return tape + <usize>rows * tapeOffset(layerAt(net, layersOf(net) - 1))
}

/**
 * Weights of squared errors, rows × padded joints.
 *
 * @param x  the network's padded input rows
 * @param tape  lossTapeBytes
 */
export function computeWeights(loss: usize, x: usize, rows: i32, tape: usize, weights: usize, width: usize): void {
  const end = weights + <usize>rows * width
  if (!hasParameters(loss)) {
    const one = f32x4.splat(1)
    for (; weights < end; weights += 16) v128.store(weights, one)
    return
  }
  forward(netOf(loss), phiOf(loss), x, rows, tape)
  let at = argumentsOn(loss, tape, rows)
  if (isSoftplus(loss)) for (; weights < end; weights += 16, at += 16) v128.store(weights, softplus4(v128.load(at)))
  else for (; weights < end; weights += 16, at += 16) v128.store(weights, exp4(v128.load(at)))
}

/** slope = −share · w · e with e = measured − predicted. */
export function weightedSlope(
  weights: usize, measured: usize, predicted: usize, bytes: usize, share: f32, slope: usize,
): void {
  const scale = f32x4.splat(-share)
  for (let at: usize = 0; at < bytes; at += 16) {
    const e = f32x4.sub(v128.load(measured + at), v128.load(predicted + at))
    v128.store(slope + at, f32x4.mul(f32x4.mul(scale, v128.load(weights + at)), e))
  }
}

/** Σ w e² over the rows, in f64. */
export function weightedSquares(weights: usize, measured: usize, predicted: usize, bytes: usize): f64 {
  let sums = f64x2.splat(0)
  for (let at: usize = 0; at < bytes; at += 16) {
    const e = f32x4.sub(v128.load(measured + at), v128.load(predicted + at))
    const terms = f32x4.mul(f32x4.mul(v128.load(weights + at), e), e)
    sums = f64x2.add(sums, f64x2.promote_low_f32x4(terms))
    sums = f64x2.add(sums, f64x2.promote_low_f32x4(v128.shuffle<f32>(terms, terms, 2, 3, 0, 1)))
  }
  return f64x2.extract_lane(sums, 0) + f64x2.extract_lane(sums, 1)
}

/**
 * The slope of `unstructured` in the predicted torque. Keeps on the tape, for its second order: [measured, predicted] rows,
 * their gradients, the network's tape, its slopes.
 *
 * @returns Σ of the loss over the rows
 */
export function unstructuredSlope(
  loss: usize, measured: usize, predicted: usize, width: usize, rows: i32, share: f32, tape: usize, slope: usize,
): f64 {
  const net = netOf(loss)
  const joints = jointsOf(loss)
  const stride = inputStride(net)
  const pairs = tape
  const pairGradients = pairs + <usize>rows * stride
  const outputs = pairGradients + <usize>rows * stride
  const slopes = outputs + <usize>rows * tapeStride(net)
  fillPairs(measured, predicted, width, joints, rows, pairs, stride)
  forward(net, phiOf(loss), pairs, rows, outputs)
  let at = argumentsOn(loss, outputs, rows)
  let top = argumentsOn(loss, slopes, rows)
  let sum: f64 = 0
  for (let row = 0; row < rows; row++) {
    const s = v128.load32_zero(at)
    sum += <f64>f32x4.extract_lane(softplus4(s), 0)
    clear(top, outputStride(net))
    store<f32>(top, share * f32x4.extract_lane(sigmoid4(s), 0))
    at += outputStride(net)
    top += outputStride(net)
  }
  backward(net, phiOf(loss), pairs, rows, outputs, slopes, 0, 0, pairGradients)
  takePredicted(pairGradients, stride, joints, rows, slope, width)
  return sum
}

/** One row of zeros: memory.fill leaves the compiled code, which costs more. */
// @ts-ignore: decorator
@inline
function clear(row: usize, bytes: usize): void {
  for (let at: usize = 0; at < bytes; at += 16) v128.store(row + at, f32x4.splat(0))
}

/** Rows [measured, predicted, 0 …]. measured = 0: zeros in its place. */
function fillPairs(
  measured: usize, predicted: usize, width: usize, joints: i32, rows: i32, pairs: usize, stride: usize,
): void {
  const bytes = <usize>joints << 2
  for (let row = 0; row < rows; row++) {
    clear(pairs, stride)
    for (let at: usize = 0; at < bytes; at += 4) {
      if (measured) store<f32>(pairs + at, load<f32>(measured + at))
      store<f32>(pairs + bytes + at, load<f32>(predicted + at))
    }
    if (measured) measured += width
    predicted += width
    pairs += stride
  }
}

/** The second half of each pair row, into padded torque rows whose padding becomes zero. */
function takePredicted(pairs: usize, stride: usize, joints: i32, rows: i32, out: usize, width: usize): void {
  const bytes = <usize>joints << 2
  for (let row = 0; row < rows; row++) {
    clear(out, width)
    for (let at: usize = 0; at < bytes; at += 4) store<f32>(out + at, load<f32>(pairs + bytes + at))
    pairs += stride
    out += width
  }
}

/**
 * Second order of squared errors with weights along ẏ: gradientTangent = share · w · ẏ, and the derivative of Σ ∂L/∂y · ẏ with
 * respect to the argument of pos, −share · pos′ · e · ẏ, which `backward` takes on to φ.
 *
 * @param argumentSlopes  out; 0 where the loss has no parameters
 */
export function weightedSecondOrder(
  loss: usize, weights: usize, posArguments: usize, measured: usize, predicted: usize, tangent: usize, bytes: usize, share: f32,
  gradientTangent: usize, argumentSlopes: usize,
): void {
  const scale = f32x4.splat(share)
  const softplus = isSoftplus(loss)
  for (let at: usize = 0; at < bytes; at += 16) {
    const w = v128.load(weights + at)
    const moved = f32x4.mul(scale, v128.load(tangent + at))
    v128.store(gradientTangent + at, f32x4.mul(w, moved))
    if (argumentSlopes) {
      const slope = softplus ? sigmoid4(v128.load(posArguments + at)) : w
      const e = f32x4.sub(v128.load(predicted + at), v128.load(measured + at))
      v128.store(argumentSlopes + at, f32x4.mul(f32x4.mul(slope, e), moved))
    }
  }
}

/** Bytes of the work area of unstructuredSecondOrder. */
export function unstructuredWorkBytes(loss: usize, rows: i32): usize {
  const net = netOf(loss)
  return <usize>rows * (2 * inputStride(net) + 3 * tapeStride(net))
}

/**
 * Second order of `unstructured` along ẏ, by the tangent of its own network.
 *
 * @param tape  what unstructuredSlope kept
 * @param gradientTangent  out: ∂²L/∂y² · ẏ
 * @param sum  += ∂/∂φ (Σ ∂L/∂y · ẏ), laid out like φ
 */
export function unstructuredSecondOrder(
  loss: usize, tape: usize, tangent: usize, width: usize, rows: i32, share: f32, work: usize, gradientTangent: usize, sum: usize,
): void {
  const net = netOf(loss)
  const phi = phiOf(loss)
  const joints = jointsOf(loss)
  const stride = inputStride(net)
  const pairBytes = <usize>rows * stride
  const tapeBytes = <usize>rows * tapeStride(net)
  const pairs = tape
  const outputs = pairs + 2 * pairBytes
  const slopes = outputs + tapeBytes
  const pairTangents = work
  const pairGradientTangents = pairTangents + pairBytes
  const sumTangents = pairGradientTangents + pairBytes
  const tangents = sumTangents + tapeBytes
  const slopeTangents = tangents + tapeBytes

  fillPairs(0, tangent, width, joints, rows, pairTangents, stride)
  forwardTangent(net, phi, 0, pairs, pairTangents, rows, outputs, sumTangents, tangents, 0)
  let at = argumentsOn(loss, outputs, rows)
  let moved = argumentsOn(loss, sumTangents, rows)
  let top = argumentsOn(loss, slopeTangents, rows)
  for (let row = 0; row < rows; row++) {
    const sigma = f32x4.extract_lane(sigmoid4(v128.load32_zero(at)), 0)
    clear(top, outputStride(net))
    store<f32>(top, share * sigma * (1 - sigma) * load<f32>(moved))
    at += outputStride(net)
    moved += outputStride(net)
    top += outputStride(net)
  }
  addBackwardTangent(
    net, phi, 0, pairs, pairTangents, rows, outputs, slopes, sumTangents, tangents, slopeTangents, 0, sum, pairGradientTangents,
  )
  takePredicted(pairGradientTangents, stride, joints, rows, gradientTangent, width)
}

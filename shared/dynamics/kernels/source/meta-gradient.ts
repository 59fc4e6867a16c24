import {
  argumentsOn, computeWeights, hasParameters, hasWeights, jointsOf, lossTapeBytes, netOf, phiOf, shareOf,
  unstructuredSecondOrder, unstructuredSlope, unstructuredWorkBytes, weightedSecondOrder, weightedSlope,
} from './losses'
import {
  addBackwardTangent, backward, forward, forwardTangent, inputStride, layerAt, layersOf, outputStride, parameterBytes, tapeOffset,
  tapeStride, weightsOf,
} from './network'
import { sgd } from './updates'

// @ts-ignore: decorator
@inline
function weightTapeBytes(loss: usize, rows: i32): usize {
  return hasWeights(loss) ? lossTapeBytes(loss, rows) : 0
}

/** Bytes of the work area of metaGradient. */
export function metaGradientWorkBytes(net: usize, loss: usize, steps: i32, rowsPerStep: i32): usize {
  const tapeBytes = <usize>rowsPerStep * tapeStride(net)
  const outBytes = <usize>rowsPerStep * outputStride(net)
  const allRows = steps * rowsPerStep
  return (
    <usize>(steps + 1) * (parameterBytes(net) + 2 * tapeBytes) +
    2 * parameterBytes(net) +
    3 * tapeBytes +
    outBytes +
    <usize>steps * outBytes +
    2 * weightTapeBytes(loss, allRows) +
    (hasWeights(loss) ? 0 : <usize>steps * lossTapeBytes(loss, rowsPerStep) + unstructuredWorkBytes(loss, rowsPerStep))
  )
}

/**
 * Runs K inner steps from θ_0 and differentiates the mean over them of the next batch's squared error with respect to φ and
 * ln(step size): the chain and its definitions are those of ../../meta-gradient.ts.
 *
 * Everything that is a tangent here is along −rate · λ rather than λ, so that the step size enters once.
 *
 * @param theta  in and out: θ_0, then θ_K
 * @param x  (K + 1) · rowsPerStep padded rows; measured: likewise
 * @param phiGradient  += ∂outer/∂φ, laid out like φ
 * @param sums  out, f64: outer error, ∂outer/∂ln(step size)
 */
export function metaGradient(
  net: usize, theta: usize, loss: usize, x: usize, measured: usize, steps: i32, rowsPerStep: i32, from: i32, rate: f32,
  work: usize, phiGradient: usize, sums: usize,
): void {
  const count = parameterBytes(net)
  const start = weightsOf(layerAt(net, from))
  const trainedBytes = count - start
  const width = outputStride(net)
  const rows = rowsPerStep
  const outBytes = <usize>rows * width
  const xBytes = <usize>rows * inputStride(net)
  const tapeBytes = <usize>rows * tapeStride(net)
  const top = <usize>rows * tapeOffset(layerAt(net, layersOf(net) - 1))
  const allRows = steps * rows
  const share = shareOf(loss, rows)
  const outerShare = <f32>(2.0 / (<f64>(rows * jointsOf(loss)) * <f64>steps))
  const weighted = hasWeights(loss)
  const learns = hasParameters(loss)

  // Per step: parameters, tape, slopes. The last step only judges.
  const thetas = work
  const tapes = thetas + <usize>(steps + 1) * count
  const allSlopes = tapes + <usize>(steps + 1) * tapeBytes
  const lambda = allSlopes + <usize>(steps + 1) * tapeBytes
  const direction = lambda + count
  const sumTangents = direction + count
  const tangents = sumTangents + tapeBytes
  const slopeTangents = tangents + tapeBytes
  const outerSlope = slopeTangents + tapeBytes
  const weights = outerSlope + outBytes
  const weightTape = weights + <usize>steps * outBytes
  const weightSlopes = weightTape + weightTapeBytes(loss, allRows)
  const pairTapes = weightSlopes + weightTapeBytes(loss, allRows)
  const pairTapeBytes = weighted ? 0 : lossTapeBytes(loss, rows)
  const pairWork = pairTapes + <usize>steps * pairTapeBytes

  // Weights depend on x alone: once for the whole stretch.
  if (weighted) computeWeights(loss, x, allRows, weightTape, weights, width)
  const posArguments = weighted && learns ? argumentsOn(loss, weightTape, allRows) : 0
  const argumentSlopes = weighted && learns ? argumentsOn(loss, weightSlopes, allRows) : 0

  let outer: f64 = 0
  memory.copy(thetas, theta, count)
  for (let t = 0; t <= steps; t++) {
    const now = thetas + <usize>t * count
    const tape = tapes + <usize>t * tapeBytes
    const slopes = allSlopes + <usize>t * tapeBytes
    const batch = x + <usize>t * xBytes
    const target = measured + <usize>t * outBytes
    forward(net, now, batch, rows, tape)
    if (t > 0) outer += squares(target, tape + top, outBytes)
    if (t == steps) break
    if (weighted) weightedSlope(weights + <usize>t * outBytes, target, tape + top, outBytes, share, slopes + top)
    else unstructuredSlope(loss, target, tape + top, width, rows, share, pairTapes + <usize>t * pairTapeBytes, slopes + top)
    memory.fill(lambda + start, 0, trainedBytes)
    backward(net, now, batch, rows, tape, slopes, from, lambda, 0)
    memory.copy(now + count, now, count)
    sgd(now + count + start, lambda + start, trainedBytes, rate)
  }
  memory.copy(theta, thetas + <usize>steps * count, count)

  const lastSlopes = allSlopes + <usize>steps * tapeBytes
  const lastTape = tapes + <usize>steps * tapeBytes
  plainSlope(measured + <usize>steps * outBytes, lastTape + top, outBytes, outerShare, lastSlopes + top)
  memory.fill(lambda + start, 0, trainedBytes)
  backward(net, thetas + <usize>steps * count, x + <usize>steps * xBytes, rows, lastTape, lastSlopes, from, lambda, 0)

  let rateGradient: f64 = 0
  for (let t = steps - 1; t >= 0; t--) {
    const now = thetas + <usize>t * count
    const tape = tapes + <usize>t * tapeBytes
    const slopes = allSlopes + <usize>t * tapeBytes
    const batch = x + <usize>t * xBytes
    const target = measured + <usize>t * outBytes
    const rowOffset = <usize>t * outBytes
    scaled(lambda + start, -rate, trainedBytes, direction + start)
    forwardTangent(net, now, direction, batch, 0, rows, tape, sumTangents, tangents, from)
    // −rate · λ · gradient is Σ ∂L/∂y · ẏ.
    rateGradient += dot(slopes + top, sumTangents + top, outBytes)
    if (weighted) {
      weightedSecondOrder(
        loss, weights + rowOffset, posArguments + rowOffset, target, tape + top, sumTangents + top, outBytes, share,
        slopeTangents + top, argumentSlopes ? argumentSlopes + rowOffset : 0,
      )
    } else {
      unstructuredSecondOrder(
        loss, pairTapes + <usize>t * pairTapeBytes, sumTangents + top, width, rows, share, pairWork, slopeTangents + top,
        phiGradient,
      )
    }
    if (t == 0) break
    // What this batch's own error says of θ_t is pulled back together with the curvature: both pulls are linear.
    plainSlope(target, tape + top, outBytes, outerShare, outerSlope)
    addTo(slopeTangents + top, outerSlope, outBytes)
    addBackwardTangent(
      net, now, direction, batch, 0, rows, tape, slopes, sumTangents, tangents, slopeTangents, from, lambda, 0,
    )
  }
  if (argumentSlopes) {
    backward(netOf(loss), phiOf(loss), x, allRows, weightTape, weightSlopes, 0, phiGradient, 0)
  }
  store<f64>(sums, outer / (<f64>(rows * jointsOf(loss)) * <f64>steps))
  store<f64>(sums, rateGradient, 8)
}

function squares(measured: usize, predicted: usize, bytes: usize): f64 {
  let sum: f64 = 0
  for (let at: usize = 0; at < bytes; at += 4) {
    const e = <f64>load<f32>(measured + at) - <f64>load<f32>(predicted + at)
    sum += e * e
  }
  return sum
}

function dot(a: usize, b: usize, bytes: usize): f64 {
  let sum: f64 = 0
  for (let at: usize = 0; at < bytes; at += 4) sum += <f64>load<f32>(a + at) * <f64>load<f32>(b + at)
  return sum
}

/** slope = −share · (measured − predicted). */
function plainSlope(measured: usize, predicted: usize, bytes: usize, share: f32, slope: usize): void {
  const scale = f32x4.splat(share)
  for (let at: usize = 0; at < bytes; at += 16) {
    v128.store(slope + at, f32x4.mul(scale, f32x4.sub(v128.load(predicted + at), v128.load(measured + at))))
  }
}

function scaled(values: usize, factor: f32, bytes: usize, out: usize): void {
  const scale = f32x4.splat(factor)
  for (let at: usize = 0; at < bytes; at += 16) v128.store(out + at, f32x4.mul(scale, v128.load(values + at)))
}

function addTo(sum: usize, values: usize, bytes: usize): void {
  for (let at: usize = 0; at < bytes; at += 16) v128.store(sum + at, f32x4.add(v128.load(sum + at), v128.load(values + at)))
}

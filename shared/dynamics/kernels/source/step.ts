import {
  computeWeights, hasWeights, jointsOf, lossTapeBytes, shareOf, unstructuredSlope, weightedSlope, weightedSquares,
} from './losses'
import {
  backward, evaluate, forward, inputStride, layerAt, layersOf, outputStride, parameterBytes, tapeOffset, tapeStride, weightsOf,
  widestStride,
} from './network'
import { chunkRows } from './rows'
import { adam, countAdamStep, momentsHead, sgd, squaredDistance } from './updates'

// Sums that a step leaves for its caller, f64 each:
//   0 Σ of the loss over rows (and joints)   1 Σ of the gradients' norms   2 steps
//   8 …: per joint, Σ of the weights or of the gradient's size   8 + padded joints …: what to divide those by

/** Bytes of the work area of the functions below, without the gradient. */
export function stepWorkBytes(net: usize, loss: usize): usize {
  const rows = <usize>chunkRows
  const evaluating = 2 * rows * (widestStride(net) + outputStride(net))
  return max(evaluating, 2 * rows * tapeStride(net)) + lossTapeBytes(loss, chunkRows) + rows * outputStride(net)
}

/** Adds to the weight sums: Σ w and the rows, or under `unstructured` Σ |slope| and Σ |slope of the plain squared error|. */
function addWeights(
  loss: usize, weights: usize, slope: usize, measured: usize, predicted: usize, width: usize, rows: i32, share: f32, sums: usize,
): void {
  const joints = jointsOf(loss)
  const own = sums + 64
  const plain = own + (width << 1)
  for (let joint = 0; joint < joints; joint++) {
    let at = <usize>joint << 2
    let ownSum: f64 = 0
    let plainSum: f64 = 0
    if (hasWeights(loss)) {
      for (let row = 0; row < rows; row++, at += width) ownSum += <f64>load<f32>(weights + at)
      plainSum = <f64>rows
    } else {
      for (let row = 0; row < rows; row++, at += width) {
        ownSum += <f64>abs(load<f32>(slope + at))
        plainSum += <f64>abs(load<f32>(measured + at) - load<f32>(predicted + at))
      }
      ownSum /= <f64>share
      plainSum *= 2.0 / <f64>joints
    }
    const to = <usize>joint << 3
    store<f64>(own + to, load<f64>(own + to) + ownSum)
    store<f64>(plain + to, load<f64>(plain + to) + plainSum)
  }
}

/** ∂L/∂y of rows whose prediction is there; adds to the sums. `work`: lossTapeBytes + rows × padded joints. */
function slopeOf(
  loss: usize, x: usize, measured: usize, predicted: usize, width: usize, rows: i32, share: f32, work: usize, slope: usize,
  sums: usize,
): void {
  const bytes = <usize>rows * width
  const weights = work + lossTapeBytes(loss, rows)
  let sum: f64
  if (hasWeights(loss)) {
    computeWeights(loss, x, rows, work, weights, width)
    weightedSlope(weights, measured, predicted, bytes, share, slope)
    sum = weightedSquares(weights, measured, predicted, bytes)
  } else {
    sum = unstructuredSlope(loss, measured, predicted, width, rows, share, work, slope)
  }
  store<f64>(sums, load<f64>(sums) + sum)
  addWeights(loss, weights, slope, measured, predicted, width, rows, share, sums)
}

/**
 * gradient += ∂L/∂θ of the loss over rows, chunk by chunk in time order.
 *
 * @param rows  of the whole step: means are over all of them
 */
export function addGradient(
  net: usize, parameters: usize, loss: usize, x: usize, measured: usize, rows: i32, from: i32, gradient: usize, work: usize,
  sums: usize,
): void {
  const width = outputStride(net)
  const lastOffset = tapeOffset(layerAt(net, layersOf(net) - 1))
  const share = shareOf(loss, rows)
  while (rows > 0) {
    const count = min(rows, chunkRows)
    const tape = work
    const slopes = tape + <usize>count * tapeStride(net)
    const lossWork = slopes + <usize>count * tapeStride(net)
    const top = <usize>count * lastOffset
    forward(net, parameters, x, count, tape)
    slopeOf(loss, x, measured, tape + top, width, count, share, lossWork, slopes + top, sums)
    backward(net, parameters, x, count, tape, slopes, from, gradient, 0)
    x += <usize>count * inputStride(net)
    measured += <usize>count * width
    rows -= count
  }
}

/**
 * Steps through rows in time order, `rowsPerStep` at a time, the last step taking what is left.
 *
 * @param moments  of Adam; 0: plain gradient descent
 * @param gradient  work area, laid out like the parameters
 */
export function applySteps(
  net: usize, parameters: usize, loss: usize, x: usize, measured: usize, rows: i32, rowsPerStep: i32, from: i32, rate: f64,
  moments: usize, gradient: usize, work: usize, sums: usize,
): void {
  const start = weightsOf(layerAt(net, from))
  const bytes = parameterBytes(net) - start
  const trained = parameters + start
  const slope = gradient + start
  while (rows > 0) {
    const count = min(rows, rowsPerStep)
    memory.fill(slope, 0, bytes)
    addGradient(net, parameters, loss, x, measured, count, from, gradient, work, sums)
    store<f64>(sums, load<f64>(sums, 8) + sqrt<f64>(squaredDistance(slope, 0, bytes)), 8)
    store<f64>(sums, load<f64>(sums, 16) + 1, 16)
    if (moments) {
      const m = moments + momentsHead + start
      countAdamStep(moments)
      adam(trained, slope, m, m + parameterBytes(net), bytes, rate, moments)
    } else {
      sgd(trained, slope, bytes, <f32>rate)
    }
    x += <usize>count * inputStride(net)
    measured += <usize>count * outputStride(net)
    rows -= count
  }
}

/** Loss weights of rows, as after a step: adds to the sums. net = 0: the prediction is given, else it is computed here. */
export function addLossSums(
  net: usize, parameters: usize, loss: usize, x: usize, xStride: usize, measured: usize, predicted: usize, width: usize,
  rows: i32, work: usize, slope: usize, sums: usize,
): void {
  const share = shareOf(loss, rows)
  while (rows > 0) {
    const count = min(rows, chunkRows)
    const bytes = <usize>count * width
    const lossWork = net ? work + <usize>chunkRows * (2 * widestStride(net) + 2 * width) : work
    let y = predicted
    let out = slope
    if (net) {
      y = work
      out = work + bytes
      evaluate(net, parameters, x, count, out + bytes, y)
    }
    slopeOf(loss, x, measured, y, width, count, share, lossWork, out, sums)
    x += <usize>count * xStride
    measured += bytes
    if (!net) {
      predicted += bytes
      slope += bytes
    }
    rows -= count
  }
}

/** Weights of rows, rows × padded joints; only for losses with weights. */
export function weightsOfRows(loss: usize, x: usize, xStride: usize, rows: i32, work: usize, weights: usize, width: usize): void {
  while (rows > 0) {
    const count = min(rows, chunkRows)
    computeWeights(loss, x, count, work, weights, width)
    x += <usize>count * xStride
    weights += <usize>count * width
    rows -= count
  }
}

/** Per joint, Σ over rows of (measured − predicted)² in f64, and the predictions, rows × padded joints. */
export function squaredErrors(
  net: usize, parameters: usize, x: usize, measured: usize, rows: i32, work: usize, joints: i32, predicted: usize, sums: usize,
): void {
  const width = outputStride(net)
  while (rows > 0) {
    const count = min(rows, chunkRows)
    evaluate(net, parameters, x, count, work, predicted)
    for (let row = 0; row < count; row++) {
      for (let joint = 0; joint < joints; joint++) {
        const at = <usize>joint << 2
        const e = <f64>load<f32>(measured + at) - <f64>load<f32>(predicted + at)
        const to = sums + (at << 1)
        store<f64>(to, load<f64>(to) + e * e)
      }
      measured += width
      predicted += width
    }
    x += <usize>count * inputStride(net)
    rows -= count
  }
}

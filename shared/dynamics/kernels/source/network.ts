import { tanh4 } from './elementary'
import { addOuter, multiplyAdd, multiplyTransposed } from './products'

// A network's layout in memory (32-bit integers), written by kernels.ts:
//   0 layers   4 activation (0 relu, 1 tanh)   8 bytes of its parameters   12 bytes of an input row
//   16 bytes of all layers' outputs for one row   20 bytes of the widest row   24 bytes of an output row
//   32 + 32 · layer: 0 depth (padded inputs, values)  4 bytes of an output row  8 offset of W  12 offset of b, both in bytes
//                    16 bytes of the outputs of the layers before it, for one row   20 inputs   24 outputs
//                    28 bytes of an input row

// @ts-ignore: decorator
@inline
export function layersOf(net: usize): i32 { return load<i32>(net) }
// @ts-ignore: decorator
@inline
export function isTanh(net: usize): bool { return load<i32>(net, 4) == 1 }
// @ts-ignore: decorator
@inline
export function parameterBytes(net: usize): usize { return <usize>load<u32>(net, 8) }
// @ts-ignore: decorator
@inline
export function inputStride(net: usize): usize { return <usize>load<u32>(net, 12) }
// @ts-ignore: decorator
@inline
export function tapeStride(net: usize): usize { return <usize>load<u32>(net, 16) }
// @ts-ignore: decorator
@inline
export function widestStride(net: usize): usize { return <usize>load<u32>(net, 20) }
// @ts-ignore: decorator
@inline
export function outputStride(net: usize): usize { return <usize>load<u32>(net, 24) }
// @ts-ignore: decorator
@inline
export function layerAt(net: usize, layer: i32): usize { return net + 32 + (<usize>layer << 5) }
// @ts-ignore: decorator
@inline
export function depthOf(at: usize): i32 { return load<i32>(at) }
// @ts-ignore: decorator
@inline
export function widthOf(at: usize): usize { return <usize>load<u32>(at, 4) }
// @ts-ignore: decorator
@inline
export function weightsOf(at: usize): usize { return <usize>load<u32>(at, 8) }
// @ts-ignore: decorator
@inline
export function biasesOf(at: usize): usize { return <usize>load<u32>(at, 12) }
// @ts-ignore: decorator
@inline
export function tapeOffset(at: usize): usize { return <usize>load<u32>(at, 16) }
// @ts-ignore: decorator
@inline
export function inputsOf(at: usize): i32 { return load<i32>(at, 20) }
// @ts-ignore: decorator
@inline
export function xStrideOf(at: usize): usize { return <usize>load<u32>(at, 28) }

/** Applies the hidden activation in place; relu keeps NaN. */
function activate(tanh: bool, values: usize, bytes: usize): void {
  const end = values + bytes
  if (tanh) {
    for (; values < end; values += 16) v128.store(values, tanh4(v128.load(values)))
  } else {
    const zero = f32x4.splat(0)
    for (; values < end; values += 16) v128.store(values, f32x4.max(v128.load(values), zero))
  }
}

/**
 * y = network(x), keeping nothing.
 *
 * @param x  rows × padded inputs
 * @param work  two areas of rows × the widest row
 * @param y  rows × padded outputs
 */
export function evaluate(net: usize, parameters: usize, x: usize, rows: i32, work: usize, y: usize): void {
  const last = layersOf(net) - 1
  let from = x
  let to = work
  let other = work + <usize>rows * widestStride(net)
  for (let layer = 0; layer <= last; layer++) {
    const at = layerAt(net, layer)
    const width = widthOf(at)
    const out = layer == last ? y : to
    multiplyAdd(from, xStrideOf(at), depthOf(at), parameters + weightsOf(at), parameters + biasesOf(at), 0, out, width, rows)
    if (layer == last) break
    activate(isTanh(net), out, <usize>rows * width)
    from = out
    to = other
    other = out
  }
}

/**
 * Evaluates the network and keeps every layer's output: layer l's rows lie at tape + rows · tapeOffset(l).
 */
export function forward(net: usize, parameters: usize, x: usize, rows: i32, tape: usize): void {
  const last = layersOf(net) - 1
  let from = x
  for (let layer = 0; layer <= last; layer++) {
    const at = layerAt(net, layer)
    const width = widthOf(at)
    const out = tape + <usize>rows * tapeOffset(at)
    multiplyAdd(from, xStrideOf(at), depthOf(at), parameters + weightsOf(at), parameters + biasesOf(at), 0, out, width, rows)
    if (layer < last) activate(isTanh(net), out, <usize>rows * width)
    from = out
  }
}

/** Multiplies by the activation's slope, told from its value h: relu h > 0, tanh 1 − h². out may be `given`. */
function multiplyBySlope(tanh: bool, h: usize, given: usize, out: usize, bytes: usize): void {
  const end = h + bytes
  if (tanh) {
    const one = f32x4.splat(1)
    for (; h < end; h += 16, given += 16, out += 16) {
      const value = v128.load(h)
      v128.store(out, f32x4.mul(v128.load(given), f32x4.sub(one, f32x4.mul(value, value))))
    }
  } else {
    const zero = f32x4.splat(0)
    for (; h < end; h += 16, given += 16, out += 16) {
      v128.store(out, v128.and(v128.load(given), f32x4.gt(v128.load(h), zero)))
    }
  }
}

/** What came into a layer: x, or the rows the layer before it left on the tape. */
// @ts-ignore: decorator
@inline
function intoLayer(net: usize, layer: i32, x: usize, tape: usize, rows: i32): usize {
  return layer == 0 ? x : tape + <usize>rows * tapeOffset(layerAt(net, layer - 1))
}

/**
 * Reverse mode: pulls ∂L/∂y back to the parameters. A layer's `slopes` are ∂L/∂(its sums), laid out like the tape.
 *
 * @param slopes  in: the last layer's; out: those of the layers from `from` on
 * @param from  first trained layer
 * @param gradient  += ∂L/∂parameters; 0: not wanted
 * @param xGradient  out, rows × padded inputs: ∂L/∂x; 0: not wanted. Only with from = 0
 */
export function backward(
  net: usize, parameters: usize, x: usize, rows: i32, tape: usize, slopes: usize, from: i32, gradient: usize, xGradient: usize,
): void {
  for (let layer = layersOf(net) - 1; layer >= from; layer--) {
    const at = layerAt(net, layer)
    const width = widthOf(at)
    const own = slopes + <usize>rows * tapeOffset(at)
    const input = intoLayer(net, layer, x, tape, rows)
    if (gradient) {
      addOuter(input, xStrideOf(at), inputsOf(at), own, width, rows, gradient + weightsOf(at), gradient + biasesOf(at))
    }
    if (layer == from) {
      const weights = parameters + weightsOf(at)
      if (xGradient) multiplyTransposed(own, width, weights, depthOf(at), rows, xGradient, xStrideOf(at), false)
      return
    }
    const below = intoLayer(net, layer, 0, slopes, rows)
    multiplyTransposed(own, width, parameters + weightsOf(at), depthOf(at), rows, below, xStrideOf(at), false)
    multiplyBySlope(isTanh(net), input, below, below, <usize>rows * xStrideOf(at))
  }
}

/**
 * Forward mode: the change of every layer when the parameters move along `direction`, or x along `xTangent`.
 *
 * @param direction  laid out like the parameters; 0: they stay
 * @param xTangent  laid out like x; 0: it stays
 * @param sumTangents  out, laid out like the tape: change of each layer's sums; the last layer's is that of y
 * @param tangents  out, likewise: change of each hidden layer's outputs
 */
export function forwardTangent(
  net: usize, parameters: usize, direction: usize, x: usize, xTangent: usize, rows: i32, tape: usize, sumTangents: usize,
  tangents: usize, from: i32,
): void {
  const last = layersOf(net) - 1
  for (let layer = from; layer <= last; layer++) {
    const at = layerAt(net, layer)
    const width = widthOf(at)
    const out = sumTangents + <usize>rows * tapeOffset(at)
    const depth = depthOf(at)
    const stride = xStrideOf(at)
    if (direction) {
      const input = intoLayer(net, layer, x, tape, rows)
      multiplyAdd(input, stride, depth, direction + weightsOf(at), direction + biasesOf(at), 0, out, width, rows)
    } else {
      memory.fill(out, 0, <usize>rows * width)
    }
    const inputTangent = layer == from ? xTangent : intoLayer(net, layer, 0, tangents, rows)
    if (inputTangent) multiplyAdd(inputTangent, stride, depth, parameters + weightsOf(at), out, width, out, width, rows)
    if (layer < last) {
      const bytes = <usize>rows * width
      const offset = <usize>rows * tapeOffset(at)
      multiplyBySlope(isTanh(net), tape + offset, out, tangents + offset, bytes)
    }
  }
}

/**
 * Tangent of `backward` along what `forwardTangent` was given: with ∂²L/∂y² · ẏ as the last layer's `slopeTangents`, the
 * product of the Hessian with the direction is added to `sum`. Source: Pearlmutter 1994.
 *
 * @param slopes  what `backward` left
 * @param slopeTangents  in: the last layer's; out: those of the layers below, laid out like the tape
 * @param sum  += the tangent of the parameter gradient
 * @param xGradientTangent  out, rows × padded inputs: tangent of ∂L/∂x; 0: not wanted. Only with from = 0 and direction = 0
 */
export function addBackwardTangent(
  net: usize, parameters: usize, direction: usize, x: usize, xTangent: usize, rows: i32, tape: usize, slopes: usize,
  sumTangents: usize, tangents: usize, slopeTangents: usize, from: i32, sum: usize, xGradientTangent: usize,
): void {
  for (let layer = layersOf(net) - 1; layer >= from; layer--) {
    const at = layerAt(net, layer)
    const width = widthOf(at)
    const stride = xStrideOf(at)
    const offset = <usize>rows * tapeOffset(at)
    const input = intoLayer(net, layer, x, tape, rows)
    const inputTangent = layer == from ? xTangent : intoLayer(net, layer, 0, tangents, rows)
    const weights = weightsOf(at)
    addOuter(input, stride, inputsOf(at), slopeTangents + offset, width, rows, sum + weights, sum + biasesOf(at))
    if (inputTangent) addOuter(inputTangent, stride, inputsOf(at), slopes + offset, width, rows, sum + weights, 0)
    if (layer == from) {
      if (xGradientTangent) {
        const own = slopeTangents + offset
        multiplyTransposed(own, width, parameters + weights, depthOf(at), rows, xGradientTangent, stride, false)
      }
      return
    }
    const below = intoLayer(net, layer, 0, slopeTangents, rows)
    const bytes = <usize>rows * stride
    if (direction) multiplyTransposed(slopes + offset, width, direction + weights, depthOf(at), rows, below, stride, false)
    multiplyTransposed(slopeTangents + offset, width, parameters + weights, depthOf(at), rows, below, stride, direction != 0)
    multiplyBySlope(isTanh(net), input, below, below, bytes)
    if (isTanh(net)) {
      addMovedSlope(input, intoLayer(net, layer, 0, sumTangents, rows), intoLayer(net, layer, 0, slopes, rows), below, bytes)
    }
  }
}

/** The slope 1 − h² moves too, by −2 h (1 − h²) ż; (1 − h²) is in the layer's slope already. */
function addMovedSlope(h: usize, sumTangent: usize, slope: usize, out: usize, bytes: usize): void {
  const end = h + bytes
  const minusTwo = f32x4.splat(-2)
  for (; h < end; h += 16, sumTangent += 16, slope += 16, out += 16) {
    const moved = f32x4.mul(f32x4.mul(minusTwo, v128.load(h)), v128.load(sumTangent))
    v128.store(out, f32x4.add(v128.load(out), f32x4.mul(v128.load(slope), moved)))
  }
}

import { tanh4 } from './elementary'
import { multiplyAdd } from './products'

// A network's layout in memory (32-bit integers), written by kernels.ts:
//   0 layers   4 activation (0 relu, 1 tanh)   8 bytes of its parameters   12 bytes of an input row
//   16 bytes of all layers' outputs for one row   20 bytes of the widest row   24 bytes of an output row
//   32 + 32 · layer: 0 depth (padded inputs, values)  4 bytes of an output row  8 offset of W  12 offset of b, both in bytes
//                    16 bytes of the outputs of the layers before it, for one row  20 inputs  24 outputs  28 bytes of an input row

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

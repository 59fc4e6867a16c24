import { layerPlaces, type NetworkShape } from '../network.ts'

/** Rows are padded with zeros to a multiple of this many f32: two SIMD registers. */
const rowMultiple = 8
const headBytes = 32
const layerBytes = 32

/** Values of a padded row of `width`. */
export function padded(width: number): number {
  return Math.ceil(width / rowMultiple) * rowMultiple
}

/** One layer's place in the padded parameter block; offsets and strides count f32 values. */
export interface PaddedLayer {
  readonly inputs: number
  readonly outputs: number
  readonly weights: number
  readonly biases: number
  readonly stride: number
}

/** How a network lies in kernel memory. Counts are f32 values. */
export interface PaddedNetwork {
  readonly shape: NetworkShape
  readonly inputs: number
  readonly outputs: number
  readonly layers: readonly PaddedLayer[]
  /** Canonical parameters. */
  readonly parameterCount: number
  /** Padded parameters. */
  readonly blockCount: number
  readonly inputStride: number
  readonly outputStride: number
  /** All layers' outputs for one row. */
  readonly tapeStride: number
  readonly widestStride: number
  /** The description the kernels read; layout in source/network.ts. */
  readonly description: Int32Array
}

/**
 * Lays a network out for the kernels: W has padded rows and a padded number of them, so that every product runs over whole
 * registers and the padding stays zero through forward, backward and update.
 *
 * @param shape  as for `layerPlaces`, except that the input width may be 0: the output is then the bias, for constant weights
 * @throws {ShapeError} the shape is not usable
 */
export function layOut(shape: NetworkShape): PaddedNetwork {
  const { sizes } = shape
  const isConstant = sizes.length === 2 && sizes[0] === 0
  const places = isConstant ? [{ inputs: 0, outputs: sizes[1], weights: 0, biases: 0 }] : layerPlaces(shape)
  const layers: PaddedLayer[] = []
  const description = new Int32Array((headBytes + layerBytes * places.length) / 4)
  let at = 0
  let tapeStride = 0
  places.forEach(({ inputs, outputs }, index) => {
    const stride = padded(outputs)
    const weights = at
    const biases = at + padded(inputs) * stride
    const tapeOffset = tapeStride
    layers.push({ inputs, outputs, weights, biases, stride })
    description.set(
      [padded(inputs), 4 * stride, 4 * weights, 4 * biases, 4 * tapeOffset, inputs, outputs, 4 * padded(inputs)],
      (headBytes + layerBytes * index) / 4,
    )
    at = biases + stride
    tapeStride += stride
  })
  const last = places.at(-1)!
  const inputStride = padded(sizes[0])
  const outputStride = padded(last.outputs)
  const widestStride = Math.max(...layers.map(({ stride }) => stride))
  description.set(
    [
      places.length, shape.activation === 'tanh' ? 1 : 0, 4 * at, 4 * inputStride, 4 * tapeStride, 4 * widestStride,
      4 * outputStride,
    ],
    0,
  )
  return {
    shape, inputs: sizes[0], outputs: last.outputs, layers, parameterCount: last.biases + last.outputs, blockCount: at,
    inputStride, outputStride, tapeStride, widestStride, description,
  }
}

/** Canonical parameters → padded block at `base` (an index into `memory`). The padding is left as it is. */
export function writeBlock(network: PaddedNetwork, canonical: ArrayLike<number>, memory: Float32Array, base: number): void {
  let at = 0
  for (const { inputs, outputs, weights, biases, stride } of network.layers) {
    for (let row = 0; row <= inputs; row++) {
      const to = base + (row < inputs ? weights + row * stride : biases)
      for (let k = 0; k < outputs; k++) memory[to + k] = canonical[at++]
    }
  }
}

/** Padded block at `base` → canonical parameters. */
export function readBlock(
  network: PaddedNetwork, memory: Float32Array, base: number, canonical: Float32Array | Float64Array,
): void {
  let at = 0
  for (const { inputs, outputs, weights, biases, stride } of network.layers) {
    for (let row = 0; row <= inputs; row++) {
      const from = base + (row < inputs ? weights + row * stride : biases)
      for (let k = 0; k < outputs; k++) canonical[at++] = memory[from + k]
    }
  }
}

import { tanh } from './elementary.ts'
import { checkLength, checkRows, ShapeError } from './shape-error.ts'
import type { Random } from './random.ts'

/** What a hidden layer applies to its sums; the output layer is linear. */
export type Activation = 'relu' | 'tanh'

/** A fully connected network: its layer widths from input to output, and the activation of its hidden layers. */
export interface NetworkShape {
  /** Widths, input first: `[21, 64, 64, 7]` takes rows of 21 and gives rows of 7. At least two. */
  readonly sizes: readonly number[]
  readonly activation: Activation
}

/** Where one layer's parameters lie in the flat array: W (inputs × outputs, row-major), then b (outputs). */
export interface LayerPlace {
  readonly inputs: number
  readonly outputs: number
  readonly weights: number
  readonly biases: number
}

/**
 * The places of all layers, first to last, in the canonical flat order: for each layer W, then b.
 *
 * @throws {ShapeError} fewer than two widths, or a width that is not a positive integer
 */
export function layerPlaces(shape: NetworkShape): LayerPlace[] {
  const { sizes } = shape
  if (sizes.length < 2) throw new ShapeError(`A network needs an input and an output width; sizes has ${sizes.length}.`)
  for (const size of sizes) {
    if (!Number.isInteger(size) || size < 1) throw new ShapeError(`Layer width ${size} is not a positive integer.`)
  }
  const places: LayerPlace[] = []
  let at = 0
  for (let layer = 0; layer + 1 < sizes.length; layer++) {
    const inputs = sizes[layer]
    const outputs = sizes[layer + 1]
    places.push({ inputs, outputs, weights: at, biases: at + inputs * outputs })
    at += (inputs + 1) * outputs
  }
  return places
}

/** Number of parameters of a network: Σ (inputs + 1) · outputs over its layers. */
export function parameterCount(shape: NetworkShape): number {
  const last = layerPlaces(shape).at(-1)!
  return last.biases + last.outputs
}

/**
 * Starting parameters: weights uniform in ±√(6 / (inputs + outputs)) for tanh and ±√(6 / inputs) for relu, biases 0.
 *
 * Source: Glorot and Bengio 2010; He, Zhang, Ren, Sun 2015.
 */
export function initialParameters(shape: NetworkShape, random: Random): Float64Array {
  const parameters = new Float64Array(parameterCount(shape))
  for (const { inputs, outputs, weights } of layerPlaces(shape)) {
    const bound = Math.sqrt(6 / (shape.activation === 'relu' ? inputs : inputs + outputs))
    for (let k = 0; k < inputs * outputs; k++) parameters[weights + k] = (2 * random.uniform() - 1) * bound
  }
  return parameters
}

/**
 * Work area for one evaluation of a network on up to `maxRows` rows, and what a backward pass needs to know of it. One
 * pass holds one evaluation: forward fills it, the other three functions read it and must see the same parameters.
 */
export interface NetworkPass {
  readonly shape: NetworkShape
  readonly maxRows: number
  readonly places: readonly LayerPlace[]
  readonly parameterCount: number
  /** Rows of the evaluation it holds. */
  rows: number
  /** Per layer, rows × inputs: what came into it. */
  readonly inputs: readonly Float64Array[]
  /** Per layer, rows × inputs: tangent of what came into it. */
  readonly inputTangents: readonly Float64Array[]
  /** Per layer, rows × inputs: derivative with respect to what came into it, and that derivative's tangent. */
  readonly inputGradients: readonly Float64Array[]
  readonly inputGradientTangents: readonly Float64Array[]
  /** Per layer, rows × outputs: derivative with respect to its sums (before the activation), and its tangent. */
  readonly sumGradients: readonly Float64Array[]
  readonly sumGradientTangents: readonly Float64Array[]
}

/**
 * Makes the work area of a network, once, outside any loop.
 *
 * @param maxRows  most rows it will be asked for at a time
 * @throws {ShapeError} the shape is not usable, or maxRows is not a positive integer
 */
export function createNetworkPass(shape: NetworkShape, maxRows: number): NetworkPass {
  if (!Number.isInteger(maxRows) || maxRows < 1) throw new ShapeError(`maxRows is ${maxRows}, expected a positive integer.`)
  const places = layerPlaces(shape)
  const perInput = () => places.map((place) => new Float64Array(maxRows * place.inputs))
  const perOutput = () => places.map((place) => new Float64Array(maxRows * place.outputs))
  return {
    shape,
    maxRows,
    places,
    parameterCount: parameterCount(shape),
    rows: 0,
    inputs: perInput(),
    inputTangents: perInput(),
    inputGradients: perInput(),
    inputGradientTangents: perInput(),
    sumGradients: perOutput(),
    sumGradientTangents: perOutput(),
  }
}

/**
 * Evaluates the network: h = act(x W + b) through the hidden layers, linear output.
 *
 * @param parameters  canonical flat order, `parameterCount(shape)` values
 * @param x  rows × inputs, row-major, normalised; may be longer than the rows used
 * @param rows  1 to `pass.maxRows`
 * @param y  out, rows × outputs, overwritten, must not alias x
 * @throws {ShapeError} wrong number of parameters or rows, x or y too short
 */
export function forward(pass: NetworkPass, parameters: Float64Array, x: Float64Array, rows: number, y: Float64Array): void {
  const { places, inputs, shape } = pass
  checkLength('parameters', parameters.length, pass.parameterCount, `sizes ${shape.sizes.join('-')}`)
  checkRows(rows, pass.maxRows)
  checkAtLeast('x', x.length, rows * shape.sizes[0])
  checkAtLeast('y', y.length, rows * places.at(-1)!.outputs)

  pass.rows = rows
  for (let k = 0; k < rows * places[0].inputs; k++) inputs[0][k] = x[k]
  for (let layer = 0; layer < places.length; layer++) {
    const place = places[layer]
    const isLast = layer === places.length - 1
    const sums = isLast ? y : inputs[layer + 1]
    fillWithBiases(parameters, place, rows, sums)
    addProduct(inputs[layer], parameters, place, rows, sums)
    if (!isLast) activate(shape.activation, rows * place.outputs, sums)
  }
}

/**
 * Pulls a derivative with respect to the outputs back to the parameters (reverse mode), for the evaluation `pass` holds.
 *
 * @param outputGradient  rows × outputs: ∂L/∂y
 * @param fromLayer  first layer whose parameters are trained: 0 for all, the last index for the last layer alone
 * @param gradient  out, overwritten: ∂L/∂parameters, zero for the layers before `fromLayer`
 */
export function backward(
  pass: NetworkPass,
  parameters: Float64Array,
  outputGradient: Float64Array,
  fromLayer: number,
  gradient: Float64Array,
): void {
  const { places, inputs, inputGradients, sumGradients, rows, shape } = pass
  const last = places.length - 1
  gradient.fill(0)
  copy(outputGradient, rows * places[last].outputs, sumGradients[last])
  for (let layer = last; layer >= fromLayer; layer--) {
    const place = places[layer]
    addOuterProduct(inputs[layer], sumGradients[layer], place, rows, gradient)
    addColumnSums(sumGradients[layer], place, rows, gradient)
    if (layer === fromLayer) break
    const active = shape.activation === 'relu' ? inputs[layer] : undefined
    inputGradients[layer].fill(0)
    addTransposedProduct(sumGradients[layer], parameters, place, rows, active, inputGradients[layer])
    multiplyBySlope(shape.activation, inputs[layer], inputGradients[layer], rows * place.inputs, sumGradients[layer - 1])
  }
}

/**
 * Change of the outputs when the parameters move along a direction (forward mode, a Jacobian-vector product), for the
 * evaluation `pass` holds. The inputs x do not move.
 *
 * @param direction  one value per parameter; taken as zero before `fromLayer`
 * @param outputTangent  out, rows × outputs, overwritten: Σ ∂y/∂parameter · direction
 */
export function forwardTangent(
  pass: NetworkPass,
  parameters: Float64Array,
  direction: Float64Array,
  fromLayer: number,
  outputTangent: Float64Array,
): void {
  const { places, inputs, inputTangents, rows, shape } = pass
  for (let layer = fromLayer; layer < places.length; layer++) {
    const place = places[layer]
    const isLast = layer === places.length - 1
    const sums = isLast ? outputTangent : inputTangents[layer + 1]
    fillWithBiases(direction, place, rows, sums)
    addProduct(inputs[layer], direction, place, rows, sums)
    if (layer > fromLayer) addProduct(inputTangents[layer], parameters, place, rows, sums)
    if (!isLast) multiplyBySlope(shape.activation, inputs[layer + 1], sums, rows * place.outputs, sums)
  }
}

/**
 * Tangent of `backward`: how the parameter gradient changes when the parameters move along the direction last given to
 * `forwardTangent` and ∂L/∂y moves by `outputGradientTangent`. With that set to ∂²L/∂y² · ẏ this is the exact product of
 * the Hessian with the direction. Needs `forward`, `backward` and `forwardTangent` before it, on the same pass.
 *
 * The result is added to `sum` times `scale`, because the hypergradient's chain needs it so.
 *
 * @param outputGradientTangent  rows × outputs
 * @param extra  rows × outputs, pulled back by plain reverse mode together with the tangent and added unscaled
 * @param sum  in and out, one value per parameter: sum += scale · Hessian · direction + Jᵀ extra
 * Source: Pearlmutter, Fast exact multiplication by the Hessian, Neural Computation 6 (1994).
 */
export function addBackwardTangent(
  pass: NetworkPass,
  parameters: Float64Array,
  direction: Float64Array,
  outputGradientTangent: Float64Array,
  fromLayer: number,
  scale: number,
  extra: Float64Array | undefined,
  sum: Float64Array,
): void {
  const { places, inputs, inputTangents, inputGradients, inputGradientTangents, sumGradients, sumGradientTangents } = pass
  const { rows, shape } = pass
  const last = places.length - 1
  // Both pulls are linear in what is pulled, so scale and extra enter once, at the output.
  const seed = sumGradientTangents[last]
  for (let k = 0; k < rows * places[last].outputs; k++) {
    seed[k] = scale * outputGradientTangent[k] + (extra === undefined ? 0 : extra[k])
  }
  for (let layer = last; layer >= fromLayer; layer--) {
    const place = places[layer]
    addOuterProduct(inputs[layer], sumGradientTangents[layer], place, rows, sum)
    if (layer > fromLayer) addOuterProduct(inputTangents[layer], sumGradients[layer], place, rows, sum, scale)
    addColumnSums(sumGradientTangents[layer], place, rows, sum)
    if (layer === fromLayer) break
    const active = shape.activation === 'relu' ? inputs[layer] : undefined
    const tangent = inputGradientTangents[layer]
    tangent.fill(0)
    addTransposedProduct(sumGradients[layer], direction, place, rows, active, tangent)
    for (let k = 0; k < rows * place.inputs; k++) tangent[k] *= scale
    addTransposedProduct(sumGradientTangents[layer], parameters, place, rows, active, tangent)
    const below = sumGradientTangents[layer - 1]
    multiplyBySlope(shape.activation, inputs[layer], tangent, rows * place.inputs, below)
    if (shape.activation === 'tanh') {
      // The slope 1 − h² moves too, by −2 h ḣ.
      const h = inputs[layer]
      for (let k = 0; k < rows * place.inputs; k++) {
        below[k] += scale * inputGradients[layer][k] * -2 * h[k] * inputTangents[layer][k]
      }
    }
  }
}

/**
 * Index of the first trained layer of a scheme, for the functions above.
 *
 * @param scheme  `all`: the whole network; `last_layer`: the linear output layer
 */
export function firstTrainedLayer(shape: NetworkShape, scheme: 'all' | 'last_layer'): number {
  return scheme === 'all' ? 0 : shape.sizes.length - 2
}

function checkAtLeast(what: string, found: number, needed: number): void {
  if (found < needed) throw new ShapeError(`${what} has ${found} values, needs at least ${needed}.`)
}

function copy(from: Float64Array, count: number, to: Float64Array): void {
  for (let k = 0; k < count; k++) to[k] = from[k]
}

function fillWithBiases(parameters: Float64Array, place: LayerPlace, rows: number, y: Float64Array): void {
  const { outputs, biases } = place
  for (let r = 0; r < rows; r++) {
    for (let o = 0; o < outputs; o++) y[r * outputs + o] = parameters[biases + o]
  }
}

/** y += x W. Half of a relu layer's outputs are zero, and skipping them halves the work of the whole chain. */
function addProduct(x: Float64Array, parameters: Float64Array, place: LayerPlace, rows: number, y: Float64Array): void {
  const { inputs, outputs, weights } = place
  for (let r = 0; r < rows; r++) {
    const to = r * outputs
    for (let i = 0; i < inputs; i++) {
      const xi = x[r * inputs + i]
      if (xi === 0) continue
      const from = weights + i * outputs
      for (let o = 0; o < outputs; o++) y[to + o] += xi * parameters[from + o]
    }
  }
}

/** x += y Wᵀ, left out where `active` is zero: the slope there is zero. */
function addTransposedProduct(
  y: Float64Array,
  parameters: Float64Array,
  place: LayerPlace,
  rows: number,
  active: Float64Array | undefined,
  x: Float64Array,
): void {
  const { inputs, outputs, weights } = place
  for (let r = 0; r < rows; r++) {
    const from = r * outputs
    for (let i = 0; i < inputs; i++) {
      if (active !== undefined && active[r * inputs + i] === 0) continue
      const row = weights + i * outputs
      let sum = 0
      for (let o = 0; o < outputs; o++) sum += y[from + o] * parameters[row + o]
      x[r * inputs + i] += sum
    }
  }
}

/** Weight gradient: g += scale · xᵀ y. */
function addOuterProduct(
  x: Float64Array,
  y: Float64Array,
  place: LayerPlace,
  rows: number,
  gradient: Float64Array,
  scale = 1,
): void {
  const { inputs, outputs, weights } = place
  for (let r = 0; r < rows; r++) {
    const from = r * outputs
    for (let i = 0; i < inputs; i++) {
      const xi = scale * x[r * inputs + i]
      if (xi === 0) continue
      const to = weights + i * outputs
      for (let o = 0; o < outputs; o++) gradient[to + o] += xi * y[from + o]
    }
  }
}

/** Bias gradient: g += Σ over rows of y. */
function addColumnSums(y: Float64Array, place: LayerPlace, rows: number, gradient: Float64Array): void {
  const { outputs, biases } = place
  for (let r = 0; r < rows; r++) {
    for (let o = 0; o < outputs; o++) gradient[biases + o] += y[r * outputs + o]
  }
}

function activate(activation: Activation, count: number, values: Float64Array): void {
  if (activation === 'relu') {
    for (let k = 0; k < count; k++) if (!(values[k] > 0)) values[k] = values[k] <= 0 ? 0 : NaN
  } else {
    for (let k = 0; k < count; k++) values[k] = tanh(values[k])
  }
}

/** out = given · act′, with the slope expressed by the activation's own value h: relu h > 0, tanh 1 − h². */
function multiplyBySlope(
  activation: Activation,
  h: Float64Array,
  given: Float64Array,
  count: number,
  out: Float64Array,
): void {
  if (activation === 'relu') {
    for (let k = 0; k < count; k++) out[k] = h[k] > 0 ? given[k] : 0
  } else {
    for (let k = 0; k < count; k++) out[k] = given[k] * (1 - h[k] * h[k])
  }
}

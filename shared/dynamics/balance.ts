import { layerPlaces, type LayerPlace, type NetworkShape } from './network.ts'
import { checkLength } from './shape-error.ts'

/**
 * Rescales the hidden units of a relu network so that gradient steps reach it evenly, without changing what it predicts:
 * relu(c z) / c = relu(z) for any c > 0, so each unit's incoming weights may grow by a factor that its outgoing ones shrink by.
 *
 * A fit leaves units whose steep outgoing weights make the prediction leap under a step at some states and hardly move at
 * others; the steepest state then bounds the rate for all. Each unit is scaled to where the squared gradients of its
 * incoming and outgoing weights are equal in the mean over the rows, which is where their sum is least. Rows count by how
 * far a step moves them already, so that the worst states shrink most.
 *
 * @param parameters  in and out, canonical order
 * @param x  rows × inputs, normalised: states as they occur
 * @param sweeps  passes over all hidden layers; after about four nothing moves any more
 * @throws {ShapeError} an array has the wrong length
 */
export function balanceNetwork(network: NetworkShape, parameters: Float64Array, x: Float64Array, rows: number, sweeps = 4): void {
  const places = layerPlaces(network)
  checkLength('x', x.length, rows * network.sizes[0], `${rows} rows of ${network.sizes[0]} inputs`)
  checkLength('parameters', parameters.length, places.at(-1)!.biases + places.at(-1)!.outputs, `sizes ${network.sizes.join('-')}`)
  if (network.activation !== 'relu') return
  const sensitivity = createSensitivity(network)
  for (let sweep = 0; sweep < sweeps; sweep++) {
    for (let layer = 0; layer + 1 < places.length; layer++) balanceLayer(places, layer, parameters, x, rows, sensitivity)
  }
}

function balanceLayer(
  places: readonly LayerPlace[], layer: number, parameters: Float64Array, x: Float64Array, rows: number, sensitivity: Sensitivity,
): void {
  const here = places[layer]
  const next = places[layer + 1]
  const incoming = new Float64Array(here.outputs)
  const outgoing = new Float64Array(here.outputs)
  for (let r = 0; r < rows; r++) {
    const reach = sensitivity.evaluate(parameters, x.subarray(r * places[0].inputs, (r + 1) * places[0].inputs))
    const slopes = sensitivity.slopes[layer]
    const values = sensitivity.values[layer + 1]
    const inputNorm = 1 + sumOfSquares(sensitivity.values[layer])
    const slopesAbove = sum(sensitivity.slopes[layer + 1])
    for (let u = 0; u < here.outputs; u++) {
      incoming[u] += reach * slopes[u] * inputNorm
      outgoing[u] += reach * values[u] * values[u] * slopesAbove
    }
  }
  for (let u = 0; u < here.outputs; u++) {
    // A unit that is never active, or leads nowhere, has no balance to find.
    if (!(incoming[u] > 0 && outgoing[u] > 0)) continue
    const factor = Math.sqrt(Math.sqrt(incoming[u] / outgoing[u]))
    for (let i = 0; i < here.inputs; i++) parameters[here.weights + i * here.outputs + u] *= factor
    parameters[here.biases + u] *= factor
    for (let o = 0; o < next.outputs; o++) parameters[next.weights + u * next.outputs + o] /= factor
  }
}

interface Sensitivity {
  /** Per layer: what came into it; the last entry is the output. */
  readonly values: readonly Float64Array[]
  /** Per layer and unit: Σ over the network's outputs of (∂output/∂sum of the unit)². */
  readonly slopes: readonly Float64Array[]
  /** Fills both for one row. @returns the squared gradient of the outputs with respect to all parameters */
  evaluate(parameters: Float64Array, x: Float64Array): number
}

function createSensitivity(network: NetworkShape): Sensitivity {
  const places = layerPlaces(network)
  const outputs = network.sizes.at(-1)!
  const values = network.sizes.map(size => new Float64Array(size))
  const slopes = places.map(place => new Float64Array(place.outputs))
  const jacobians = places.map(place => new Float64Array(outputs * place.outputs))
  for (let j = 0; j < outputs; j++) jacobians.at(-1)![j * outputs + j] = 1
  slopes.at(-1)!.fill(1)

  function evaluate(parameters: Float64Array, x: Float64Array): number {
    values[0].set(x)
    places.forEach((place, layer) => {
      for (let o = 0; o < place.outputs; o++) {
        let z = parameters[place.biases + o]
        for (let i = 0; i < place.inputs; i++) z += values[layer][i] * parameters[place.weights + i * place.outputs + o]
        values[layer + 1][o] = layer + 1 < places.length ? Math.max(z, 0) : z
      }
    })
    for (let layer = places.length - 1; layer > 0; layer--) pullBack(parameters, layer)
    let reach = 0
    for (let layer = 0; layer < places.length; layer++) reach += sum(slopes[layer]) * (1 + sumOfSquares(values[layer]))
    return reach
  }

  function pullBack(parameters: Float64Array, layer: number): void {
    const place = places[layer]
    slopes[layer - 1].fill(0)
    for (let j = 0; j < outputs; j++) {
      for (let i = 0; i < place.inputs; i++) {
        let slope = 0
        if (values[layer][i] > 0) {
          for (let o = 0; o < place.outputs; o++) {
            slope += jacobians[layer][j * place.outputs + o] * parameters[place.weights + i * place.outputs + o]
          }
        }
        jacobians[layer - 1][j * place.inputs + i] = slope
        slopes[layer - 1][i] += slope * slope
      }
    }
  }

  return { values, slopes, evaluate }
}

function sum(values: Float64Array): number {
  let total = 0
  for (const value of values) total += value
  return total
}

function sumOfSquares(values: Float64Array): number {
  let total = 0
  for (const value of values) total += value * value
  return total
}

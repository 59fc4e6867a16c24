import { expect, test } from 'vitest'
import { balanceNetwork } from '../../../shared/dynamics/balance.ts'
import { backward, createNetworkPass, forward, initialParameters, type NetworkShape } from '../../../shared/dynamics/network.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'

const network: NetworkShape = { sizes: [6, 8, 8, 2], activation: 'relu' }
const rows = 50
const random = createRandom(3)
const x = Float64Array.from({ length: rows * 6 }, () => random.normal())

/** A network as a fit may leave it: one unit of the first layer is hardly fed and leads steeply on. */
function createUneven(shape = network): Float64Array {
  const parameters = initialParameters(shape, createRandom(3))
  for (let i = 0; i < 7; i++) parameters[i * 8] *= 0.01
  for (let o = 0; o < 8; o++) parameters[7 * 8 + o] *= 100
  return parameters
}

test('balancing changes no prediction', () => {
  const uneven = createUneven()
  const balanced = uneven.slice()

  balanceNetwork(network, balanced, x, rows)

  const [before, after] = [predict(uneven), predict(balanced)]
  expect(balanced).not.toEqual(uneven)
  // Scaling and scaling back rounds twice per weight: a few 1e-16 of values of order 10.
  for (let k = 0; k < before.length; k++) expect(Math.abs(after[k] - before[k])).toBeLessThan(1e-12)
})

test('balancing makes the largest gradient smaller', () => {
  const uneven = createUneven()
  const balanced = uneven.slice()

  balanceNetwork(network, balanced, x, rows)

  expect(largestGradient(balanced)).toBeLessThan(0.5 * largestGradient(uneven))
})

test('a tanh network is left as it is', () => {
  const shape: NetworkShape = { ...network, activation: 'tanh' }
  const parameters = createUneven(shape)
  const kept = parameters.slice()

  balanceNetwork(shape, parameters, x, rows)

  expect(parameters).toEqual(kept)
})

function predict(parameters: Float64Array): Float64Array {
  const y = new Float64Array(rows * 2)
  forward(createNetworkPass(network, rows), parameters, x, rows, y)
  return y
}

function largestGradient(parameters: Float64Array): number {
  const pass = createNetworkPass(network, 1)
  const gradient = new Float64Array(parameters.length)
  let largest = 0
  for (let row = 0; row < rows; row++) {
    for (const slope of [Float64Array.of(1, 0), Float64Array.of(0, 1)]) {
      forward(pass, parameters, x.subarray(row * 6), 1, new Float64Array(2))
      backward(pass, parameters, slope, 0, gradient)
      largest = Math.max(largest, Math.hypot(...gradient))
    }
  }
  return largest
}

import { describe, expect, test } from 'vitest'
import { lossKinds, type LossName, type LossShape, type Positive } from '../../../shared/dynamics/losses/index.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'

// Central differences with step 1e-5 err by about 1e-10 · third derivative + 1e-16 / 1e-5 at values of order 1.
const step = 1e-5
const tolerance = 1e-8

const rows = 3
const random = createRandom(5)
const normals = (count: number) => Float64Array.from({ length: count }, () => random.normal())

const cases = (Object.keys(lossKinds) as LossName[]).flatMap(name =>
  (['exp', 'softplus'] as Positive[]).map(positive => ({ name, positive })))

describe.each(cases)('loss $name with $positive', ({ name, positive }) => {
  const shape: LossShape = { joints: 2, inputs: 6, hidden: 5, positive }
  const kind = lossKinds[name]
  const loss = kind.create(shape, rows)
  const phi = kind.initialParameters(shape, random).map(value => value + 0.4 * random.normal())
  const given = { rows, x: normals(rows * 6), measured: normals(rows * 2), predicted: normals(rows * 2) }
  const direction = normals(rows * 2)

  test('the prediction gradient is the slope of the value', () => {
    const gradient = new Float64Array(rows * 2)

    const value = loss.gradient(phi, given, gradient)

    expect(value).toBe(loss.value(phi, given))
    expectClose(gradient, slopes(given.predicted, predicted => loss.value(phi, { ...given, predicted })))
  })

  test('the parameter gradient is the slope of the value, scaled and added', () => {
    const sum = new Float64Array(phi.length).fill(1)

    loss.addParameterGradient(phi, given, 2, sum)

    expectClose(sum, slopes(phi, values => loss.value(values, given)).map(slope => 1 + 2 * slope))
  })

  test('the second order is the slope of the prediction gradient along a direction', () => {
    const tangent = new Float64Array(rows * 2)
    const sum = new Float64Array(phi.length)
    const gradientAt = (predicted: Float64Array) => {
      const out = new Float64Array(rows * 2)
      loss.gradient(phi, { ...given, predicted }, out)
      return out
    }
    const along = (values: Float64Array) => {
      const out = new Float64Array(rows * 2)
      loss.gradient(values, given, out)
      return dot(out, direction)
    }

    loss.secondOrder(phi, given, direction, tangent, 3, sum)

    const above = gradientAt(given.predicted.map((value, k) => value + step * direction[k]))
    const below = gradientAt(given.predicted.map((value, k) => value - step * direction[k]))
    expectClose(tangent, above.map((value, k) => (value - below[k]) / (2 * step)))
    expectClose(sum, slopes(phi, along).map(slope => 3 * slope))
  })

  test('the number of parameters is what the kind states', () => {
    expect(phi.length).toBe(kind.parameterCount(shape))
    expect(loss.parameterCount).toBe(kind.parameterCount(shape))
  })
})

test.each(['mse', 'structured', 'state_dependent'] as const)('%s starts close to plain squared error', name => {
  const shape: LossShape = { joints: 2, inputs: 6, hidden: 8, positive: 'exp' }
  const kind = lossKinds[name]
  const given = { rows, x: normals(rows * 6), measured: normals(rows * 2), predicted: normals(rows * 2) }
  const weights = new Float64Array(2)

  kind.create(shape, rows).weights(kind.initialParameters(shape, createRandom(1)), given, weights)

  for (const weight of weights) expect(Math.abs(weight - 1)).toBeLessThan(0.5)
})

test('an unstructured loss starts as a bowl: its gradient pulls the prediction towards the measurement', () => {
  const shape: LossShape = { joints: 2, inputs: 6, hidden: 8, positive: 'exp' }
  const kind = lossKinds.unstructured
  const given = {
    rows: 2, x: new Float64Array(12), measured: Float64Array.of(1, -1, 0.5, 2), predicted: Float64Array.of(0, 0, 1.5, 0),
  }
  const gradient = new Float64Array(4)

  kind.create(shape, 2).gradient(kind.initialParameters(shape, createRandom(1)), given, gradient)

  expect([...gradient].map(Math.sign)).toEqual([-1, 1, 1, -1])
})

function slopes(values: Float64Array, of: (values: Float64Array) => number): Float64Array {
  return values.map((value, k) => (of(values.with(k, value + step)) - of(values.with(k, value - step))) / (2 * step))
}

function dot(a: Float64Array, b: Float64Array): number {
  return a.reduce((sum, value, k) => sum + value * b[k], 0)
}

function expectClose(found: Float64Array, wanted: Float64Array): void {
  expect(found.length).toBe(wanted.length)
  for (let k = 0; k < wanted.length; k++) expect(Math.abs(found[k] - wanted[k])).toBeLessThan(tolerance)
}

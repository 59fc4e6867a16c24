import { describe, expect, test } from 'vitest'
import { lossKinds, type LossName, type Positive } from '../../../shared/dynamics/losses/index.ts'
import { createMetaGradient, type ChainShape, type Scheme } from '../../../shared/dynamics/meta-gradient.ts'
import { initialParameters, type Activation } from '../../../shared/dynamics/network.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { ShapeError } from '../../../shared/dynamics/shape-error.ts'

const joints = 2
const inputs = 6
const steps = 5
const rowsPerStep = 3

// Central differences with step h err by about h² · third derivative + rounding / h: 1e-10 + 1e-16 / 1e-5 at values near 1.
const step = 1e-5
const tolerance = 1e-7

function createCase(scheme: Scheme, loss: LossName, activation: Activation, positive: Positive) {
  const random = createRandom(11)
  const lossShape = { joints, inputs, hidden: 4, positive }
  const shape: ChainShape = {
    scheme, network: { sizes: [inputs, 5, 4, joints], activation }, loss, lossShape, steps, rowsPerStep,
  }
  const rows = (steps + 1) * rowsPerStep
  const normals = (count: number) => Float64Array.from({ length: count }, () => random.normal())
  const stretch = {
    x: normals(rows * inputs),
    measured: normals(rows * joints),
    base: normals(rows * joints),
    ahead: Float64Array.from({ length: rows }, (_, row) => 0.1 * ((row % rowsPerStep) + 1)),
  }
  const theta = scheme === 'bias' ? normals(joints) : initialParameters(shape.network, random)
  const kind = lossKinds[loss]
  const phi = kind.initialParameters(lossShape, random).map((value) => value + 0.3 * random.normal())
  const learned = Float64Array.from([...phi, Math.log(0.1), ...(scheme === 'bias' ? [Math.log(0.5)] : [])])
  return { shape, stretch, theta, learned }
}

const schemes: Scheme[] = ['all', 'last_layer', 'bias']
const losses = Object.keys(lossKinds) as LossName[]

describe.each(schemes)('scheme %s', (scheme) => {
  test.each(losses.flatMap((loss) => [
    { loss, activation: 'relu' as const, positive: 'softplus' as const },
    { loss, activation: 'tanh' as const, positive: 'exp' as const },
  ]))('five steps of $loss, $activation: the hypergradient agrees with differences', ({ loss, activation, positive }) => {
    const { shape, stretch, theta, learned } = createCase(scheme, loss, activation, positive)
    const meta = createMetaGradient(shape)
    const gradient = new Float64Array(meta.learnedCount)
    const outerAt = (values: Float64Array) => meta.compute(stretch, theta.slice(), values, new Float64Array(values.length))

    meta.compute(stretch, theta.slice(), learned, gradient)

    const differences = learned.map((value, k) => {
      const above = learned.with(k, value + step)
      const below = learned.with(k, value - step)
      return (outerAt(above) - outerAt(below)) / (2 * step)
    })
    for (let k = 0; k < learned.length; k++) expect(Math.abs(gradient[k] - differences[k])).toBeLessThan(tolerance)
    expect(Math.max(...gradient.map(Math.abs))).toBeGreaterThan(1e-4)
  })
})

test('only the last layer moves under last_layer', () => {
  const { shape, stretch, theta, learned } = createCase('last_layer', 'mse', 'relu', 'exp')
  const adapted = theta.slice()

  createMetaGradient(shape).compute(stretch, adapted, learned, new Float64Array(learned.length))

  const lastLayer = 5 * joints
  expect(adapted.subarray(0, -lastLayer)).toEqual(theta.subarray(0, -lastLayer))
  expect(adapted.subarray(-lastLayer)).not.toEqual(theta.subarray(-lastLayer))
})

test('a stretch of the wrong length is refused with the lengths', () => {
  const { shape, stretch, theta, learned } = createCase('all', 'mse', 'relu', 'exp')
  const short = { ...stretch, x: stretch.x.subarray(1) }
  const compute = () => createMetaGradient(shape).compute(short, theta, learned, new Float64Array(learned.length))

  expect(compute).toThrow(ShapeError)
  expect(compute).toThrow('x has 107 values, expected 108')
})

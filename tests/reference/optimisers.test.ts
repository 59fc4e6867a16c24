// Sources: Kingma and Ba, Adam (2015), algorithm 1 with its defaults: three steps with gradients .5, .5, −.25 from 0 computed
// by hand from it; tfjs 4.22, which uses ε = 1e-7 and float32.
import * as tf from '@tensorflow/tfjs'
import { beforeAll, expect, test } from 'vitest'
import { createRandom } from '../../shared/dynamics/random.ts'
import { updateKinds, type UpdateName } from '../../shared/dynamics/updates/index.ts'

beforeAll(async () => {
  await tf.setBackend('cpu')
})

test('Adam follows the published algorithm', () => {
  const published = [-0.00099999998, -0.00199999996, -0.00251565335]
  const parameters = new Float64Array(1)
  const state = updateKinds.adam.initialState(1)

  const found = [0.5, 0.5, -0.25].map((gradient) => {
    updateKinds.adam.step(parameters, Float64Array.of(gradient), state, 1e-3)
    return parameters[0]
  })

  // The published values have 11 decimals.
  for (let k = 0; k < 3; k++) expect(Math.abs(found[k] - published[k])).toBeLessThan(6e-12)
})

// tfjs rounds to float32 (6e-8 relative a step) and adds ε = 1e-7, which moves a step by 1e-7 / |gradient|.
const tolerance = 2e-6

test.each([
  { name: 'sgd' as const, create: () => tf.train.sgd(0.01) },
  { name: 'adam' as const, create: () => tf.train.adam(0.01) },
])('twenty steps of $name agree with tfjs', ({ name, create }: { name: UpdateName, create: () => tf.Optimizer }) => {
  const random = createRandom(7)
  const start = Array.from({ length: 5 }, () => random.normal())
  const target = Array.from({ length: 5 }, () => random.normal())
  const variable = tf.variable(tf.tensor1d(start))
  const optimiser = create()
  const parameters = Float64Array.from(start)
  const update = updateKinds[name]
  const state = update.initialState(5)

  for (let step = 0; step < 20; step++) {
    optimiser.minimize(() => tf.sum(tf.square(tf.sub(variable, target))) as tf.Scalar)
    update.step(parameters, parameters.map((value, k) => 2 * (value - target[k])), state, 0.01)
  }

  const theirs = variable.dataSync()
  for (let k = 0; k < 5; k++) expect(Math.abs(parameters[k] - theirs[k])).toBeLessThan(tolerance)
  expect(Math.abs(parameters[0] - start[0])).toBeGreaterThan(0.01)
})

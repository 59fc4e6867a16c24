import { describe, expect, test } from 'vitest'
import { lossKinds } from '../../../shared/dynamics/losses/index.ts'
import type { LossName, LossShape } from '../../../shared/dynamics/losses/index.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'
import type { Learnable } from '../../../shared/dynamics/linear/learnable.ts'
import { createLearnableFirstOrder, thetaOfFirstOrder } from '../../../shared/dynamics/linear/learnable-first-order.ts'
import { constantsOf, createLearnableRecursive, thetaOf } from '../../../shared/dynamics/linear/learnable-recursive.ts'
import { constants, joints, motionOf, size } from './example.ts'

const steps = 10
const motion = motionOf(60, 1, row => (row < 20 ? [0, 0, 0] : [3, -2, 1]))
// A pause within the chain, so that time matters.
for (let row = 24; row < 60; row++) motion.time[row] += 0.3

const random = createRandom(3)
const weights = Array.from({ length: steps + 1 }, () => Float64Array.from({ length: size + joints }, () => random.normal()))

/** An outer error of every value on the tape: linear and quadratic. */
function outer(learnable: Learnable, theta: Float64Array): number {
  const tape = learnable.tape(theta, steps)
  tape.run(learnable.update(theta).initial(), motion, 4)
  let sum = 0
  tape.values.forEach((values, i) => values.forEach((value, k) => { sum += weights[i][k] * value + 0.5 * value * value }))
  return sum
}

function checkGradient(learnable: Learnable, theta: Float64Array): void {
  const tape = learnable.tape(theta, steps)
  tape.run(learnable.update(theta).initial(), motion, 4)
  const gradient = new Float64Array(theta.length)
  tape.addGradient(tape.values.map((values, i) => values.map((value, k) => weights[i][k] + value)), true, gradient)

  theta.forEach((_, k) => {
    const step = 1e-5
    const above = theta.slice()
    const below = theta.slice()
    above[k] += step
    below[k] -= step
    const want = (outer(learnable, above) - outer(learnable, below)) / (2 * step)
    // Central differences err by step² times the third derivative, about 1e-10 of values up to 100, and by rounding, 1e-10.
    expect(Math.abs(gradient[k] - want)).toBeLessThan(1e-6 * (1 + Math.abs(want)))
  })
}

describe('the gradient through a chain of steps', () => {
  test('agrees with central differences for every constant of the recursive update, gate included', () => {
    const busy = { ...constants, noise: [0.3, 0.5], threshold: 3, opening: [0.5, 0.7, 0.2] }

    checkGradient(createLearnableRecursive(size, joints, 4), thetaOf(busy))
  })

  const losses: LossName[] = ['mse', 'structured', 'state_dependent', 'unstructured']

  test.each(losses)('agrees with central differences for first-order steps under %s', loss => {
    const lossShape: LossShape = { joints, inputs: 3 * joints, hidden: 5, positive: 'exp' }
    const lossParameters = lossKinds[loss].initialParameters(lossShape, random).map(value => value + 0.1 * random.normal())

    checkGradient(
      createLearnableFirstOrder(size, joints, 4, loss, lossShape),
      thetaOfFirstOrder({ rowsPerStep: 4, decay: 0.5, steps: [0.1, 0.2, 0.1, 0.3, 0.2], loss, lossShape, lossParameters }),
    )
  })

  test('constants survive the way to θ and back', () => {
    const back = constantsOf(thetaOf(constants), size, joints, 4)

    for (const key of Object.keys(constants) as (keyof typeof constants)[]) {
      [back[key]].flat().forEach((value, k) => expect(value).toBeCloseTo([constants[key]].flat()[k], 12))
    }
  })
})

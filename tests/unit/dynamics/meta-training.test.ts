import { describe, expect, test } from 'vitest'
import { createKernelNextBatch } from '../../../shared/dynamics/kernels-next-batch.ts'
import { createKernels } from '../../../shared/dynamics/kernels/kernels.ts'
import { createKernelMetaGradient } from '../../../shared/dynamics/kernels/meta-gradient.ts'
import {
  defaultMetaTrainingOptions, metaTrain, type MetaTrainingOptions, type MetaTrainingProgress, type MetaTrainingResult,
} from '../../../shared/dynamics/meta-training.ts'
import type { Scheme } from '../../../shared/dynamics/meta-gradient.ts'
import type { NormalisedMotion } from '../../../shared/dynamics/motion.ts'
import { initialParameters } from '../../../shared/dynamics/network.ts'
import {
  meanNextBatchError, measureNextBatch, predictMotion, type AdaptationRule, type Base,
} from '../../../shared/dynamics/prequential.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'

const joints = 2
const inputs = 6
const base: Base = {
  network: { sizes: [inputs, 8, joints], activation: 'relu' },
  parameters: initialParameters({ sizes: [inputs, 8, joints], activation: 'relu' }, createRandom(1)),
}

/**
 * A motion of slow sines whose torque the base misses by a load of its own: the first joint by a large, quiet part, the
 * second by none under loud noise, so that a loss that weighs the joints apart beats plain squared error.
 */
function createMotion(seed: number, rows = 600): NormalisedMotion {
  const random = createRandom(seed)
  const phases = Array.from({ length: inputs }, () => 6 * random.uniform())
  const load = 2 + random.normal()
  const time = Float64Array.from({ length: rows }, (_, row) => 0.02 * row)
  const x = Float64Array.from({ length: rows * inputs }, (_, k) =>
    Math.sin(time[Math.floor(k / inputs)] * (1 + (k % inputs) / 3) + phases[k % inputs]))
  const motion = { name: `motion ${seed}`, rows, time, x, measured: new Float64Array(rows * joints) }
  const measured = predictMotion(base, motion).map((predicted, k) =>
    predicted + (k % joints === 0 ? load * (1 + x[Math.floor(k / joints) * inputs]) + 0.02 * random.normal() : random.normal()))
  return { ...motion, measured }
}

const training = [1, 2, 3, 4].map(seed => createMotion(seed))
const validation = [11, 12].map(seed => createMotion(seed))
const evaluation = [21, 22].map(seed => createMotion(seed))
const options: MetaTrainingOptions = {
  ...defaultMetaTrainingOptions, hidden: 6, updates: 100, innerSteps: 8, streams: 4, outerRate: 0.05,
}

function run(given: Partial<MetaTrainingOptions>): { result: MetaTrainingResult; progress: MetaTrainingProgress[] } {
  const steps = metaTrain(base, training, validation, { ...options, ...given })
  const progress: MetaTrainingProgress[] = []
  for (;;) {
    const step = steps.next()
    if (step.done) return { result: step.value, progress }
    progress.push(step.value)
  }
}

describe.each(['all', 'last_layer', 'bias'] as Scheme[])('scheme %s', (scheme) => {
  test('a learned loss predicts motions it has not seen better than plain squared error at its best rate', () => {
    const { result } = run({ scheme, loss: 'structured' })

    const [plain] = result.rivals.map(({ rule }) => meanNextBatchError(base, evaluation, rule))
    expect(meanNextBatchError(base, evaluation, result.learned.rule)).toBeLessThan(plain)
    expect(plain).toBeLessThan(result.none)
  })
})

test('the weights learned are lower on the joint whose torque is mostly noise', () => {
  const { result } = run({ scheme: 'bias', loss: 'structured' })

  const [quiet, loud] = result.learned.rule.lossParameters
  expect(loud).toBeLessThan(quiet)
})

test('the same seed gives the same loss, another seed another', () => {
  const parameters = (seed: number) => run({ seed, updates: 5 }).result.learned.rule.lossParameters

  expect(parameters(3)).toEqual(parameters(3))
  expect(parameters(4)).not.toEqual(parameters(3))
})

test('every outer update is reported, and some with the error on the validation motions', () => {
  const { progress } = run({ updates: 40 })

  const updates = progress.filter(step => step.phase === 'updates')
  expect(updates.map(({ update }) => update)).toEqual(Array.from({ length: 40 }, (_, k) => k + 1))
  expect(updates.filter(({ validation: error }) => error !== undefined).length).toBeGreaterThanOrEqual(2)
})

test('without a validation motion, or with motions too short to unroll, it refuses', () => {
  expect(() => metaTrain(base, training, [], options).next()).toThrow('at least one validation recording')
  expect(() => metaTrain(base, [createMotion(1, 20)], validation, options).next()).toThrow('at least 36 rows')
})

describe('the kernels', () => {
  // f32 against f64 along 150 steps: rounding of 6e-8 a step, not amplified at a stable rate.
  const tolerance = 1e-4

  const rule: AdaptationRule = {
    scheme: 'all', update: 'sgd', rate: 0.02, rowsPerStep: 4, loss: 'mse',
    lossShape: { joints, inputs, hidden: 6, positive: 'exp' }, lossParameters: new Float64Array(0), fadingRate: 0,
  }

  test.each([
    rule, { ...rule, scheme: 'last_layer' as const }, { ...rule, scheme: 'bias' as const, fadingRate: 0.3 },
    { ...rule, update: 'adam' as const, rate: 0.005 }, { ...rule, rate: 0 },
    { ...rule, loss: 'structured' as const, lossParameters: Float64Array.of(0.3, -0.5) },
  ])('measure the same next-batch error: $scheme, $update, $loss, rate $rate', (given) => {
    const measure = createKernelNextBatch(createKernels())

    const found = measure(base, validation[0], given)

    const wanted = measureNextBatch(base, validation[0], given).error
    expect(Math.abs(found / wanted - 1)).toBeLessThan(tolerance)
    measure.free()
  })

  test('learn a loss as good as the double-precision path does', () => {
    const kernels = createKernels()
    const measure = createKernelNextBatch(kernels)

    const { result } = run({ loss: 'structured', measure, createMetaGradient: shape => createKernelMetaGradient(kernels, shape) })

    const reference = run({ loss: 'structured' }).result
    expect(result.learned.error / reference.learned.error).toBeCloseTo(1, 1)
    measure.free()
  })
})

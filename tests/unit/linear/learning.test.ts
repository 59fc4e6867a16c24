import { describe, expect, test } from 'vitest'
import { createKernels } from '../../../shared/dynamics/kernels/kernels.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { fitContextBasis } from '../../../shared/dynamics/linear/context-fit.ts'
import { learnLinear, type LearnedLinear, type LinearCandidate } from '../../../shared/dynamics/linear/learn.ts'
import { fitConstant } from '../../../shared/dynamics/linear/least-squares.ts'
import { simulatedMotions } from '../../../shared/dynamics/linear/linear-motion.ts'
import { measureLinear } from '../../../shared/dynamics/linear/measure.ts'
import { defaultLinearMetaTrainingOptions } from '../../../shared/dynamics/linear/meta-training.ts'
import { createLeastSquares } from '../../../shared/dynamics/linear/least-squares.ts'
import { joints, motionOf, noise, size } from './example.ts'

const loads = [[0.8, -1.2, 0.5], [-0.4, 0.9, 1.1], [1.3, 0.2, -0.6]]
const training = [
  ...loads.map((z, k) => motionOf(400, 10 + k, () => z)),
  ...loads.map((z, k) => motionOf(400, 20 + k, row => (row < 200 ? [0, 0, 0] : z), [4])),
  motionOf(400, 30, () => [0, 0, 0]),
]
const validation = [
  motionOf(400, 40, () => [-0.7, 0.6, 0.9]),
  motionOf(400, 41, row => (row < 160 ? [0, 0, 0] : [1, 1, -1]), [3.2]),
]
const unseen = motionOf(400, 50, row => (row < 200 ? [0, 0, 0] : [-1, 0.5, 0.8]), [4])
const options = { ...defaultLinearMetaTrainingOptions, updates: 30, steps: 20, streams: 4, positive: 'exp', hidden: 4 } as const

function learn(candidate: LinearCandidate, seed = 1): { learned: LearnedLinear; curve: number[] } {
  const run = learnLinear(candidate, training, validation, { ...options, seed })
  const curve: number[] = []
  let step = run.next()
  for (; !step.done; step = run.next()) curve.push(step.value.outer)
  return { learned: step.value, curve }
}

describe('learning the constants of a linear scheme', () => {
  test('the learned filter beats tuned least squares and learned first-order steps where a payload is gripped', () => {
    const [recursive, mse, rival] = (['recursive', 'mse', 'least_squares'] as const).map(candidate =>
      measureLinear(learn(candidate).learned.create(), unseen))

    expect(recursive.nextBatch).toBeLessThan(rival.nextBatch)
    expect(recursive.nextBatch).toBeLessThan(mse.nextBatch)
    expect(recursive.stale1).toBeLessThan(mse.stale1)
  })

  test('comes out the same to the bit for the same seed, and otherwise for another', () => {
    const one = JSON.stringify(learn('recursive', 3).learned.constants)

    expect(JSON.stringify(learn('recursive', 3).learned.constants)).toBe(one)
    expect(JSON.stringify(learn('recursive', 4).learned.constants)).not.toBe(one)
  })

  test('reports every outer update and keeps one of those it looked at', () => {
    const { learned, curve } = learn('state_dependent')

    expect(curve).toHaveLength(30)
    expect(curve.every(Number.isFinite)).toBe(true)
    expect([0, 15, 30]).toContain(learned.update)
  })

  test('refuses to learn without motions to choose on', () => {
    expect(() => learnLinear('recursive', training, [], options).next()).toThrow(/0 to choose on/)
  })
})

describe('the errors along a motion', () => {
  test('of an update that learns nothing are all the mean squared residual', () => {
    const idle = createLeastSquares({ rowsPerStep: 4, forgetting: 0, initial: 1e-30 }, size, joints)
    const mean = (from: number) => {
      const values = unseen.residual.subarray(from * joints)
      return values.reduce((sum, value) => sum + value * value, 0) / values.length
    }

    const errors = measureLinear(idle, unseen)

    for (const error of [errors.nextBatch, errors.stale04, errors.stale1]) expect(error).toBeCloseTo(mean(0), 9)
    expect(errors.after2sStale1).toBeCloseTo(mean(100), 9)
    expect(errors.frozen).toBeCloseTo(mean(200), 9)
  })

  test('of least squares on a constant payload fall to the noise once settled', () => {
    const motion = motionOf(400, 60, () => loads[0])

    const update = createLeastSquares({ rowsPerStep: 4, forgetting: 0, initial: 1e4 }, size, joints)

    const { frozen, after2sStale1, stale1, nextBatch } = measureLinear(update, motion)

    // 200 rows for three states: their own error adds 3 / 400; the sampling error of the noise's variance is 1 / √400 = 5 %.
    expect(frozen).toBeLessThan(1.2 * noise ** 2)
    expect(after2sStale1).toBeLessThan(1.2 * noise ** 2)
    expect(nextBatch).toBeLessThan(stale1)
  })
})

describe('simulated payloads', () => {
  test('are explained down to the noise by the basis they were drawn from', () => {
    const unloaded = { ...motionOf(400, 70, () => [0, 0, 0]), basis: randomBasis(400 * joints * 4) }

    const simulated = simulatedMotions([unloaded], createRandom(1))

    expect(simulated.map(({ changes }) => changes!.length)).toEqual([0, 2])
    expect(fitConstant(simulated[0]).error).toBeLessThan(1.2 * noise ** 2)
    expect(fitConstant(simulated[1]).error).toBeGreaterThan(10 * noise ** 2)
  })
})

function randomBasis(length: number): Float64Array {
  const random = createRandom(9)
  return Float64Array.from({ length }, () => random.normal())
}

describe('a learned basis', () => {
  const normalisation = {
    inputMean: new Array<number>(3 * joints).fill(0), inputStd: new Array<number>(3 * joints).fill(1),
    outputMean: new Array<number>(joints).fill(0), outputStd: new Array<number>(joints).fill(1),
  }

  /** Payloads act through a fixed function of the state: a basis of two. */
  function acted(seed: number, z: readonly number[], unloaded = false) {
    const motion = motionOf(400, seed, () => [0, 0, 0])
    const { x } = motion
    const residual = Float64Array.from({ length: 400 * joints }, (_, k) => {
      const [q, , v, , a] = x.subarray(Math.floor(k / joints) * 3 * joints)
      return k % joints === 0 ? z[0] * Math.max(q, 0) + z[1] * v : z[0] * a - z[1] * Math.max(v, 0)
    })
    return { ...motion, residual, unloaded, basis: new Float64Array(0) }
  }

  test('carries over to payloads and motions it has not seen', () => {
    const random = createRandom(5)
    const loaded = Array.from({ length: 12 }, (_, k) => acted(100 + k, [2 * random.normal(), 2 * random.normal()]))
    const motions = [...loaded, acted(120, [0, 0], true)]
    const kernels = createKernels()
    const run = fitContextBasis(kernels, motions, normalisation, {
      size: 2, hidden: [24], steps: 1500, rowsPerStep: 128, rate: 1e-2, seed: 1,
    })
    let step = run.next()
    while (!step.done) step = run.next()
    const { basis } = step.value
    const fresh = acted(200, [1.5, -1])
    const table = new Float64Array(400 * joints * 2)

    basis.evaluate(fresh.x, 400, table)

    const power = fresh.residual.reduce((sum, value) => sum + value * value, 0) / fresh.residual.length
    expect(fitConstant({ ...fresh, basis: table }).error).toBeLessThan(0.03 * power)
  })

  test('needs two payloads to tell apart', () => {
    const run = fitContextBasis(createKernels(), [acted(1, [1, 1]), acted(2, [0, 0], true)], normalisation, { size: 2 })

    expect(() => run.next()).toThrow(/at least two stretches/)
  })
})

import { describe, expect, test } from 'vitest'
import {
  createAdaptation,
  createPrediction,
  createPredictor,
  lossShapeOf,
  type AdaptationInputs,
  type BatchEntry,
  type RequestedSettings,
} from '../../../shared/dynamics/index.ts'
import { measureNextBatch, type AdaptationRule } from '../../../shared/dynamics/prequential.ts'
import { batch, inputsOf, joints, kernels, limits, lossOf, predictAdapted, predictBase, send, version } from './two-joint-arm.ts'

const motion = Array.from({ length: 80 }, (_, k) =>
  batch(k + 1, { offset: (row, joint) => Math.sin(k / 11 + joint) + 0.1 * Math.cos(5 * row + k) }),
)

/** The same motion as the double-precision reference takes it. */
function normalised(entries: readonly BatchEntry[]) {
  const { inputMean, inputStd, outputMean, outputStd } = version.description.normalisation
  const x: number[] = []
  const measured: number[] = []
  for (const { rows, position, velocity, acceleration, torque } of entries) {
    for (let row = 0; row < rows; row++) {
      const raw = [position, velocity, acceleration].flatMap(part => Array.from(part.subarray(row * joints, (row + 1) * joints)))
      x.push(...raw.map((value, c) => (value - inputMean[c]) / inputStd[c]))
      for (let j = 0; j < joints; j++) measured.push((torque[row * joints + j] - outputMean[j]) / outputStd[j])
    }
  }
  return {
    name: 'test',
    rows: measured.length / joints,
    x: Float64Array.from(x),
    measured: Float64Array.from(measured),
    time: Float64Array.from(entries.flatMap(entry => Array.from(entry.time))),
  }
}

/** No error is below its noise. */
function noiseless(inputs: AdaptationInputs): AdaptationInputs {
  return { ...inputs, version: { ...version, description: { ...version.description, noise: [1e-9, 1e-9] } } }
}

describe('what is served', () => {
  const unguarded = { stepNorm: 1000, torqueChange: 1, drift: 2, tolerance: 1, toleranceFloor: 10, excitation: 0 }
  const cases: [AdaptationRule['scheme'], AdaptationRule['update'], AdaptationRule['loss'], number][] = [
    ['all', 'sgd', 'mse', 0.003],
    ['all', 'adam', 'mse', 0.003],
    ['all', 'sgd', 'state_dependent', 0.003],
    ['last_layer', 'sgd', 'structured', 0.003],
    ['last_layer', 'sgd', 'unstructured', 0.003],
    ['bias', 'sgd', 'mse', 0.4],
    ['bias', 'adam', 'mse', 0.1],
    ['bias', 'sgd', 'state_dependent', 0.4],
  ]

  // f32 against f64: 6e-8 a value, growing over 80 steps; the errors themselves are near 0.1.
  test.each(cases)('under %s, %s, %s has the next-batch error of the double-precision reference', (scheme, kind, name, rate) => {
    const loss = name === 'mse' ? 'mse' : lossOf(name, scheme)
    const fade = scheme === 'bias' ? 0.7 : 1
    const requested: RequestedSettings = { scheme, update: { kind, rate, rowsPerStep: 4, fade }, guard: unguarded }
    const adaptation = createAdaptation(kernels, noiseless(inputsOf(requested, loss)))

    const errors = motion.map(entry => send(adaptation, entry))

    const rule: AdaptationRule = {
      scheme,
      update: kind,
      rate,
      rowsPerStep: 4,
      loss: name,
      lossShape: loss === 'mse' ? { joints, inputs: 6, hidden: 0, positive: 'exp' } : lossShapeOf(loss.description),
      lossParameters: loss === 'mse' ? new Float64Array(0) : Float64Array.from(loss.parameters),
      fadingRate: -Math.log(fade),
    }
    const base = { network: version.description.network, parameters: Float64Array.from(version.parameters) }
    const reference = measureNextBatch(base, normalised(motion), rule)
    const mean = errors.reduce((sum, { before }) => sum + before, 0) / errors.length
    expect(errors.flatMap(({ reasons }) => reasons)).toEqual([])
    expect(Math.abs(mean / reference.error - 1)).toBeLessThan(1e-4)
  })

  test('is the same whether rows come as one batch or as several, when steps are the same', () => {
    const requested: RequestedSettings = { scheme: 'all', update: { kind: 'sgd', rate: 0.02 }, guard: unguarded }
    const single = createAdaptation(kernels, inputsOf(requested))
    const many = createAdaptation(kernels, inputsOf(requested))
    send(single, batch(1, { rows: 16 }))
    for (let k = 0; k < 4; k++) send(many, batch(k + 1))

    expect(single.snapshot().parameters).toEqual(many.snapshot().parameters)
  })
})

describe('a fading bias', () => {
  const requested: RequestedSettings = { scheme: 'bias', update: { kind: 'sgd', rate: 0.5, fade: 0.4 } }

  test('is predicted as base plus what is left of it after the seconds ahead', () => {
    const adaptation = createAdaptation(kernels, inputsOf(requested))
    send(adaptation, batch(1))
    const states = batch(2, { rows: 3, from: 0.3 })
    const ahead = Float64Array.of(0, 0.4, 1)

    const torque = predictAdapted(adaptation, states, ahead)

    const base = predictBase(states).torque
    const { bias } = adaptation.snapshot()
    const { outputStd } = version.description.normalisation
    for (let k = 0; k < torque.length; k++) {
      const [row, j] = [Math.floor(k / joints), k % joints]
      expect(torque[k] - base[k]).toBeCloseTo(bias!.values[j] * outputStd[j] * 0.4 ** ahead[row], 12)
    }
    expect(bias!.values[0]).toBeGreaterThan(0.1)
  })

  test('fades between batches by the time between their newest rows', () => {
    const adaptation = createAdaptation(kernels, inputsOf({ ...requested, guard: { gapPeriods: 100 } }))
    send(adaptation, batch(1))
    const before = adaptation.snapshot().bias!.values[0]
    const later = batch(2, { rows: 2, from: 1.06, offset: () => 0.1 })

    const { before: error } = send(adaptation, later)

    // Row h seconds after as_of was predicted with fade^h of the bias; both joints have the same offsets and rates.
    const squares = [1, 1.02].map(h => (0.1 - before * 0.4 ** h) ** 2)
    expect(error).toBeCloseTo((squares[0] + squares[1]) / 2, 6)
  })

  test('serves, at its newest row, what it had learned when the newest quarter was held out', () => {
    const adaptation = createAdaptation(kernels, inputsOf(requested))
    send(adaptation, batch(1, { rows: 32 }))
    const trained = createAdaptation(kernels, inputsOf(requested))
    send(trained, batch(1, { rows: 24 }))

    const left = 0.4 ** (8 * 0.02)

    expect(adaptation.status().asOf).toBeCloseTo(31 * 0.02, 12)
    expect(adaptation.snapshot().bias!.values[0]).toBeCloseTo(trained.snapshot().bias!.values[0] * left, 12)
  })
})

describe('a snapshot', () => {
  test.each(['all', 'last_layer', 'bias'] as const)('of scheme %s predicts locally the very same numbers', scheme => {
    const adaptation = createAdaptation(kernels, inputsOf({ scheme, update: { rate: 0.02, fade: 0.5 } }))
    for (const entry of motion.slice(0, 10)) send(adaptation, entry)
    const states = motion[12]
    const ahead = Float64Array.of(0.1, 0.12, 0.14, 0.16)

    const { parameters, bias } = adaptation.snapshot()
    const local = createPredictor(kernels, { ...version, parameters }, limits)
    const into = createPrediction(states.rows, joints)
    local.predict({ ...states, time: null }, into, bias, ahead)

    expect(into.torque).toEqual(predictAdapted(adaptation, states, ahead))
  })

  test('stays as it was when the adaptation goes on', () => {
    const adaptation = createAdaptation(kernels, inputsOf({ scheme: 'bias' }))
    send(adaptation, batch(1))
    const { bias } = adaptation.snapshot()
    const copy = bias!.values.slice()

    for (const sequence of [2, 3, 4]) send(adaptation, batch(sequence))

    expect(bias!.values).toEqual(copy)
  })
})

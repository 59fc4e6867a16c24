import { describe, expect, test } from 'vitest'
import {
  createKernels,
  createPrediction,
  createPredictor,
  decodeVersion,
  encodeVersion,
  fitCoverage,
  StateRangeError,
  type Version,
} from '../../../shared/dynamics/index.ts'
import { coverageOfRow, prepareCoverage } from '../../../shared/dynamics/coverage.ts'
import { fade, ln } from '../../../shared/dynamics/deterministic.ts'
import { noiseOfResiduals, pickReferenceStates } from '../../../shared/dynamics/fit-statistics.ts'

const kernels = createKernels()

/** One joint whose torque is 10 · position N·m, whatever the rest. */
const spring: Version = {
  description: {
    joints: 1,
    network: { sizes: [3, 1], activation: 'relu' },
    normalisation: { inputMean: [0, 0, 0], inputStd: [1, 1, 1], outputMean: [0], outputStd: [10] },
    coverage: { low: [-1, -1, -1], high: [1, 1, 1], mean: [0, 0, 0], whitening: [2, 0, 1, 0, 0, 1], d99: 2 },
    noise: [0.01],
    referenceStates: [[0, 0, 0]],
  },
  parameters: Float32Array.of(1, 0, 0, 0),
}

function predict(position: number[], options: { torque?: number; torqueRate?: number; time?: number[] } = {}) {
  const { torque = 1000, torqueRate, time } = options
  const limits = { torque: Float64Array.of(torque), torqueRate: torqueRate === undefined ? null : Float64Array.of(torqueRate) }
  const predictor = createPredictor(kernels, spring, limits)
  const rows = position.length
  const into = createPrediction(rows, 1)
  const still = new Float64Array(rows)
  predictor.predict(
    {
      rows,
      position: Float64Array.from(position),
      velocity: still,
      acceleration: still,
      time: time ? Float64Array.from(time) : null,
    },
    into,
  )
  predictor.release()
  return {
    torque: Array.from(into.torque),
    limited: Array.from(into.limited.subarray(0, 2 * into.limitedCount)),
    coverage: into.coverage,
  }
}

describe('predicted torque', () => {
  test('passes unchanged within the limits', () => {
    expect(predict([1, -2, 3])).toMatchObject({ torque: [10, -20, 30], limited: [] })
  })

  test('is clamped to the torque limit, on either side, and says where', () => {
    expect(predict([1, -2, 3], { torque: 15 })).toMatchObject({ torque: [10, -15, 15], limited: [1, 0, 2, 0] })
  })

  test('changes from row to row by no more than the torque-rate limit, where time is given', () => {
    const time = [0, 0.1, 0.2, 0.4]

    // 50 N·m/s: 5 N·m in 0.1 s, 10 N·m in 0.2 s, each from the row before as it was clamped.
    expect(predict([0, 1, 1, 0], { torqueRate: 50, time })).toMatchObject({ torque: [0, 5, 10, 0], limited: [1, 0] })
    expect(predict([0, 1, 1, -3], { torqueRate: 50, time })).toMatchObject({ torque: [0, 5, 10, 0], limited: [1, 0, 3, 0] })
    expect(predict([0, 1, 1, -3], { torqueRate: 50 })).toMatchObject({ torque: [0, 10, 10, -30], limited: [] })
  })

  test('is saturated before its rate is bounded', () => {
    expect(predict([-2, 9], { torque: 15, torqueRate: 100, time: [0, 0.1] })).toMatchObject({
      torque: [-15, -5],
      limited: [0, 0, 1, 0],
    })
  })

  test('is refused where a state is too far out for a finite number', () => {
    const attempt = () => predict([0, 1e300])

    expect(attempt).toThrow(StateRangeError)
    expect(attempt).toThrow(expect.objectContaining({ row: 1, joint: 0, channel: 'position' }))
  })
})

describe('coverage of a row', () => {
  // By hand: distance √((2 p)² + v² + a²), d99 = 2; channels count when within ±1.
  test.each([
    [[0, 0, 0], 1],
    [[1, 0, 0], 1],
    [[0.5, 1, 1], 1],
    [[2, 0, 0], (2 / 3) * (2 / 4)],
    [[0, 3, 4], (1 / 3) * (2 / 5)],
    [[1, 1, 2], (2 / 3) * (2 / 3)],
    [[5, 5, 5], 0],
  ])('%j is %d', (row, want) => {
    const coverage = prepareCoverage(spring.description.coverage, 3)

    expect(coverageOfRow(coverage, Float64Array.from(row))).toBeCloseTo(want, 14)
  })

  test('comes with every prediction', () => {
    expect(predict([0, 2]).coverage[1]).toBeCloseTo(1 / 3, 14)
  })
})

describe('the statistics of a fit', () => {
  test('whiten correlated channels to distances of the inverse covariance', () => {
    // Rows ±(1, 1), ±(2, −2) and so on: covariance [[5, −3], [−3, 5]] / 2, whose inverse is [[5, 3], [3, 5]] / 8.
    const rows = [
      [1, 1],
      [-1, -1],
      [2, -2],
      [-2, 2],
    ]
    const { mean, whitening } = fitCoverage(Float64Array.from(rows.flat()), 4, 2)
    const distance = (x: number, y: number) => Math.hypot(whitening[0] * x, whitening[1] * x + whitening[2] * y)

    expect(mean).toEqual([0, 0])
    // The ridge of 1e-6 shows in the sixth digit.
    expect(distance(1, 0) ** 2).toBeCloseTo(5 / 8, 5)
    expect(distance(1, 1) ** 2).toBeCloseTo(2, 5)
    expect(distance(1, -1) ** 2).toBeCloseTo(0.5, 5)
  })

  test('take percentiles between neighbours', () => {
    const data = Float64Array.from({ length: 201 }, (_, k) => k)

    expect(fitCoverage(data, 201, 1)).toMatchObject({ low: [1], high: [199] })
  })

  test('stay finite when a channel stands still', () => {
    const data = Float64Array.from({ length: 40 }, (_, k) => (k % 2 === 0 ? Math.sin(k) : 0.3))
    const { whitening, d99 } = fitCoverage(data, 20, 2)

    for (const value of [...whitening, d99]) expect(Number.isFinite(value)).toBe(true)
  })

  test('tell noise from what a model gets wrong slowly', () => {
    // Alternating ±0.1 on a slow ramp: differences ±0.2 + 0.001, so the root of half their mean square is 0.1414.
    const residual = Float64Array.from({ length: 1000 }, (_, k) => 0.001 * k + (k % 2 === 0 ? 0.1 : -0.1))

    expect(noiseOfResiduals([residual], 1)[0]).toBeCloseTo(0.2 / Math.SQRT2, 4)
    expect(noiseOfResiduals([residual, residual], 1)[0]).toBeCloseTo(0.2 / Math.SQRT2, 4)
  })

  test('pick reference states evenly through the data', () => {
    const data = Float64Array.from({ length: 640 }, (_, k) => k)

    expect(pickReferenceStates(data, 640, 1).flat()).toEqual(Array.from({ length: 32 }, (_, k) => 20 * k + 10))
    expect(pickReferenceStates(data.subarray(0, 3), 3, 1)).toEqual([[0], [1], [2]])
  })
})

describe('a version as bytes', () => {
  test('comes back equal, and predicts the same', () => {
    expect(decodeVersion(encodeVersion(spring))).toEqual(spring)
  })

  test('does not depend on the order of keys', () => {
    const turned = (value: unknown): unknown =>
      value === null || typeof value !== 'object' || Array.isArray(value)
        ? value
        : Object.fromEntries(
            Object.entries(value)
              .reverse()
              .map(([key, inner]) => [key, turned(inner)]),
          )
    const other = { description: turned(spring.description) as Version['description'], parameters: spring.parameters }

    expect(encodeVersion(other)).toEqual(encodeVersion(spring))
  })

  test('is refused when it is cut, longer, of another kind, or holds what is no number', () => {
    const bytes = encodeVersion(spring)

    expect(() => decodeVersion(bytes.subarray(0, bytes.length - 1))).toThrow(RangeError)
    expect(() => decodeVersion(Uint8Array.from([...bytes, 0]))).toThrow(RangeError)
    expect(() => decodeVersion(Uint8Array.of(1, 2, 3))).toThrow(/no version/)
    expect(() => encodeVersion({ ...spring, parameters: Float32Array.of(1, 0, NaN, 0) })).toThrow(/value 2 is NaN/)
    expect(() => encodeVersion({ ...spring, parameters: Float32Array.of(1, 0, 0) })).toThrow(/3 values, expected 4/)
  })
})

describe('our own logarithm', () => {
  test('agrees with the engine to a few units in the last place over the whole range', () => {
    for (let k = -1070; k < 1020; k += 0.37) {
      const x = 2 ** k
      // Two units in the last place of ours, one of the engine's.
      if (x > 0) expect(Math.abs(ln(x) - Math.log(x))).toBeLessThanOrEqual(3 * 2 ** -52 * Math.abs(Math.log(x)))
    }
    expect([ln(1), ln(0), ln(Infinity)]).toEqual([0, -Infinity, Infinity])
    expect(ln(-1)).toBeNaN()
  })

  test('lets things fade', () => {
    expect(fade(0.5, 2)).toBeCloseTo(0.25, 15)
    expect(fade(0.37, 0.02)).toBeCloseTo(0.37 ** 0.02, 15)
    expect([fade(1, 100), fade(0.2, 0), fade(0, 1)]).toEqual([1, 1, 0])
  })
})

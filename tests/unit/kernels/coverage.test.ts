import { describe, expect, it } from 'vitest'
import { coverageOfRow, fitCoverage, prepareCoverage } from '../../../shared/dynamics/coverage.ts'
import { createKernels } from '../../../shared/dynamics/kernels/kernels.ts'
import { parameterCount, type NetworkShape } from '../../../shared/dynamics/network.ts'
import { numbers } from './numbers.ts'

function setUp(joints: number) {
  const channels = 3 * joints
  const statistics = fitCoverage(numbers(1, 200 * channels), 200, channels)
  const shape: NetworkShape = { sizes: [channels, 5, joints], activation: 'relu' }
  const kernels = createKernels()
  const ones = new Float64Array(channels).fill(1)
  return {
    statistics,
    kernels,
    network: kernels.loadNetwork(shape, numbers(2, parameterCount(shape))),
    normalisation: kernels.loadNormalisation({
      inputMean: ones, inputStd: ones, outputMean: ones.subarray(0, joints), outputStd: ones.subarray(0, joints),
    }),
  }
}

describe('coverage beside a prediction', () => {
  it.each([1, 2, 3, 4, 5, 6, 7].flatMap((joints) => [1, 2, 3, 8, 29].map((rows) => ({ joints, rows }))))(
    'is that of the reference to the bit: $rows rows of $joints joints',
    ({ joints, rows }) => {
      const { statistics, kernels, network, normalisation } = setUp(joints)
      // Up to three times as far out as the data: some rows are inside, some beyond d99.
      const part = (seed: number) => numbers(seed, rows * joints).map((value, k) => value * (0.5 + (k % 5) / 2))
      const motion = { position: part(3), velocity: part(4), acceleration: part(5) }
      const out = new Float64Array(rows)
      const coverage = kernels.loadCoverage(statistics)

      kernels.predict(network, normalisation, motion, rows, new Float64Array(rows * joints), { coverage, out })

      const prepared = prepareCoverage(statistics, 3 * joints)
      const want = Array.from({ length: rows }, (_, row) => {
        const of = (values: Float64Array) => [...values.subarray(row * joints, (row + 1) * joints)]
        const { position, velocity, acceleration } = motion
        return coverageOfRow(prepared, Float64Array.from([...of(position), ...of(velocity), ...of(acceleration)]))
      })
      expect([...out]).toEqual(want)
    },
  )

  it('is refused for statistics of another arm', () => {
    const { kernels, network, normalisation } = setUp(2)
    const coverage = kernels.loadCoverage(setUp(3).statistics)
    const motion = { position: numbers(3, 2), velocity: numbers(4, 2), acceleration: numbers(5, 2) }

    expect(() =>
      kernels.predict(network, normalisation, motion, 1, new Float64Array(2), { coverage, out: new Float64Array(1) }),
    ).toThrow('The coverage is of 3 joints, the motion of 2.')
  })
})

import { describe, expect, it } from 'vitest'
import { createKernels } from '../../../shared/dynamics/kernels/kernels.ts'
import {
  createNetworkPass, forward, initialParameters, parameterCount, type NetworkShape,
} from '../../../shared/dynamics/network.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { numbers } from './numbers.ts'

const hiddenWidths = [[5], [17], [64], [64, 64], [5, 17, 64]]
const shapes: NetworkShape[] = [1, 2, 3, 4, 5, 6, 7].flatMap((joints) =>
  (['relu', 'tanh'] as const).map((activation) => {
    const hidden = hiddenWidths[(joints + (activation === 'relu' ? 0 : 2)) % hiddenWidths.length]
    return { sizes: [3 * joints, ...hidden, joints], activation }
  }),
)

describe('forward', () => {
  it.each(shapes)('agrees with the double-precision network: %o', (shape) => {
    const rows = 37
    const [inputs, outputs] = [shape.sizes[0], shape.sizes.at(-1)!]
    const kernels = createKernels()
    const parameters = Float32Array.from(initialParameters(shape, createRandom(1)))
    const x = Float32Array.from(numbers(2, rows * inputs))

    const got = kernels.forward(kernels.loadNetwork(shape, parameters), x, rows, new Float32Array(rows * outputs))

    const want = new Float64Array(rows * outputs)
    forward(createNetworkPass(shape, rows), Float64Array.from(parameters), Float64Array.from(x), rows, want)
    // A sum of 64 products of order 1 rounds 128 times: √128 · 2⁻²⁵ = 3.4e-7 root mean square. Six times that, for four
    // layers and the worst of 259 values.
    for (let k = 0; k < want.length; k++) expect(Math.abs(got[k] - want[k])).toBeLessThan(2e-6)
  })

  it.each(shapes)('gives a row the same to the bit alone and among 64: %o', (shape) => {
    const rows = 64
    const [inputs, outputs] = [shape.sizes[0], shape.sizes.at(-1)!]
    const kernels = createKernels()
    const network = kernels.loadNetwork(shape, numbers(3, parameterCount(shape)))
    const x = Float32Array.from(numbers(4, rows * inputs))

    const together = kernels.forward(network, x, rows, new Float32Array(rows * outputs))

    for (const count of [1, 2, 3, 5]) {
      for (let row = 0; row + count <= rows; row += count) {
        const some = x.slice(row * inputs, (row + count) * inputs)
        const alone = kernels.forward(network, some, count, new Float32Array(count * outputs))
        expect(bits(alone)).toEqual(bits(together.slice(row * outputs, (row + count) * outputs)))
      }
    }
  })

  it('is the same to the bit in two instances, whatever was evaluated before', () => {
    const shape: NetworkShape = { sizes: [21, 64, 64, 7], activation: 'tanh' }
    const parameters = numbers(5, parameterCount(shape))
    const x = Float32Array.from(numbers(6, 100 * 21))
    const [first, second] = [createKernels(), createKernels()]
    const other = second.loadNetwork({ sizes: [9, 17, 3], activation: 'relu' }, numbers(7, 9 * 17 + 17 + 17 * 3 + 3))
    second.forward(other, new Float32Array(1800).fill(1e30), 200, new Float32Array(600))

    const a = first.forward(first.loadNetwork(shape, parameters), x, 100, new Float32Array(700))
    const b = second.forward(second.loadNetwork(shape, parameters), x, 100, new Float32Array(700))

    expect(bits(a)).toEqual(bits(b))
  })

  it('lets a row with NaN spoil itself and no other', () => {
    const shape: NetworkShape = { sizes: [6, 17, 2], activation: 'relu' }
    const kernels = createKernels()
    const network = kernels.loadNetwork(shape, numbers(8, parameterCount(shape)))
    const x = Float32Array.from(numbers(9, 5 * 6))
    const clean = kernels.forward(network, x, 5, new Float32Array(10))
    x[2 * 6 + 1] = NaN

    const spoiled = kernels.forward(network, x, 5, new Float32Array(10))

    expect([...spoiled.slice(4, 6)]).toEqual([NaN, NaN])
    expect([...spoiled.slice(0, 4), ...spoiled.slice(6)]).toEqual([...clean.slice(0, 4), ...clean.slice(6)])
  })
})

describe('predict', () => {
  const joints = 7
  const shape: NetworkShape = { sizes: [21, 64, 64, 7], activation: 'relu' }
  const normalisation = {
    inputMean: numbers(10, 21),
    inputStd: numbers(11, 21).map((value) => 1.5 + value),
    outputMean: numbers(12, 7).map((value) => 10 * value),
    outputStd: numbers(13, 7).map((value) => 20 + 10 * value),
  }
  const motion = (rows: number) => ({
    position: numbers(14, rows * joints),
    velocity: numbers(15, rows * joints),
    acceleration: numbers(16, rows * joints),
  })

  it.each([1, 9, 64, 130])('is normalise, forward, y · std + mean, for %i rows', (rows) => {
    const kernels = createKernels()
    const network = kernels.loadNetwork(shape, numbers(17, parameterCount(shape)))
    const { position, velocity, acceleration } = motion(rows)

    const torque = kernels.predict(
      network, kernels.loadNormalisation(normalisation), { position, velocity, acceleration }, rows, new Float64Array(rows * 7),
    )

    const x = new Float32Array(rows * 21)
    for (let row = 0; row < rows; row++) {
      const values = [position, velocity, acceleration].flatMap((part) => [...part.slice(row * 7, row * 7 + 7)])
      values.forEach((value, k) => {
        x[row * 21 + k] = (value - normalisation.inputMean[k]) / normalisation.inputStd[k]
      })
    }
    const y = kernels.forward(network, x, rows, new Float32Array(rows * 7))
    const { outputStd, outputMean } = normalisation
    expect([...torque]).toEqual([...y].map((value, k) => value * outputStd[k % 7] + outputMean[k % 7]))
  })

  it('takes what was written into the motion area', () => {
    const kernels = createKernels()
    const network = kernels.loadNetwork(shape, numbers(17, parameterCount(shape)))
    const handle = kernels.loadNormalisation(normalisation)
    const given = motion(3)
    const want = kernels.predict(network, handle, given, 3, new Float64Array(21))

    const area = kernels.motionArea(joints, 3)
    area.position.set(given.position)
    area.velocity.set(given.velocity)
    area.acceleration.set(given.acceleration)
    const got = kernels.predict(network, handle, undefined, 3, new Float64Array(21))

    expect([...got]).toEqual([...want])
  })

  it('refuses a normalisation of another arm and one that divides by zero', () => {
    const kernels = createKernels()
    const network = kernels.loadNetwork({ sizes: [6, 5, 2], activation: 'relu' }, numbers(18, 47))
    const handle = kernels.loadNormalisation(normalisation)

    expect(() => kernels.predict(network, handle, motion(1), 1, new Float64Array(7))).toThrow(/6 inputs.*7 joints/)
    const zero = { ...normalisation, inputStd: new Float64Array(21) }
    expect(() => kernels.loadNormalisation(zero)).toThrow(/inputStd: value 0 is 0/)
  })
})

describe('network handles', () => {
  const shape: NetworkShape = { sizes: [9, 5, 17, 3], activation: 'relu' }

  it('read back what was written, to the bit', () => {
    const kernels = createKernels()
    const parameters = Float32Array.from(numbers(19, parameterCount(shape)))
    const network = kernels.loadNetwork(shape, numbers(20, parameterCount(shape)))

    network.write(parameters)

    expect(bits(network.read())).toEqual(bits(parameters))
    expect(bits(network.clone().read())).toEqual(bits(parameters))
  })

  it('give their memory back, and are refused after that', () => {
    const kernels = createKernels()
    const parameters = numbers(21, parameterCount(shape))
    const kept = kernels.loadNetwork(shape, parameters)
    const before = kernels.usedBytes

    for (let round = 0; round < 100; round++) kernels.loadNetwork(shape, parameters).free()
    const freed = kept.clone()
    freed.free()

    expect(kernels.usedBytes).toBe(before)
    expect(() => freed.read()).toThrow('This network was freed.')
    expect(() => freed.free()).toThrow('This network was freed.')
    expect(bits(kept.read())).toEqual(bits(Float32Array.from(parameters)))
  })

  it('survive the growth of the memory', () => {
    const kernels = createKernels()
    const parameters = Float32Array.from(numbers(22, parameterCount(shape)))

    const networks = Array.from({ length: 2000 }, () => kernels.loadNetwork(shape, parameters))

    for (const network of networks) expect(network.read()).toEqual(parameters)
  })
})

function bits(values: Float32Array): number[] {
  return [...new Uint32Array(values.slice().buffer)]
}

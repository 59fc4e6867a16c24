import { describe, expect, it } from 'vitest'
import { createKernels, type Kernels, type NetworkScheme } from '../../../shared/dynamics/kernels/kernels.ts'
import { lossKinds, type LossName, type LossShape, type Positive } from '../../../shared/dynamics/losses/index.ts'
import {
  backward, createNetworkPass, firstTrainedLayer, forward, initialParameters, parameterCount, type Activation, type NetworkShape,
} from '../../../shared/dynamics/network.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { updateKinds, type UpdateName } from '../../../shared/dynamics/updates/index.ts'
import { numbers } from './numbers.ts'

const names: LossName[] = ['mse', 'structured', 'state_dependent', 'unstructured']
const cases = names.flatMap((name, index) =>
  (['exp', 'softplus'] as Positive[]).flatMap((positive) =>
    (['relu', 'tanh'] as Activation[]).flatMap((activation, offset) =>
      (['all', 'last_layer'] as NetworkScheme[]).map((scheme, shift) => {
        const joints = 1 + ((index * 4 + offset * 2 + shift + (positive === 'exp' ? 0 : 3)) % 7)
        const hidden = [[5], [17, 5], [64, 64]][(joints + shift) % 3]
        return { name, positive, activation, scheme, joints, hidden, lossHidden: [5, 17, 32][joints % 3] }
      }),
    ),
  ),
)

interface Given {
  shape: NetworkShape
  lossShape: LossShape
  theta: Float64Array
  phi: Float64Array
  x: Float64Array
  measured: Float64Array
}

/**
 * Everything rounded to f32, so that both sides start from the same numbers. Errors are between 0.5 and 1 in size: with
 * smaller ones measured − predicted cancels digits, which is no property of the kernels.
 */
function setUp(
  { name, positive, activation, joints, hidden, lossHidden }: Omit<(typeof cases)[number], 'scheme'>, rows: number,
): Given {
  const shape: NetworkShape = { sizes: [3 * joints, ...hidden, joints], activation }
  const lossShape: LossShape = { joints, inputs: 3 * joints, hidden: lossHidden, positive }
  const phi = lossKinds[name].initialParameters(lossShape, createRandom(1))
  const round = (values: Float64Array) => values.map(Math.fround)
  const theta = round(initialParameters(shape, createRandom(2)))
  const x = round(numbers(4, rows * 3 * joints))
  const measured = new Float64Array(rows * joints)
  forward(createNetworkPass(shape, rows), theta, x, rows, measured)
  const errors = numbers(5, rows * joints).map((value) => value / 2 + Math.sign(value) / 2)
  return {
    shape,
    lossShape,
    theta,
    phi: round(phi.map((value, k) => value + 0.3 * numbers(3, phi.length)[k])),
    x,
    measured: round(measured.map((value, k) => value + errors[k])),
  }
}

function load(kernels: Kernels, name: LossName, { shape, lossShape, theta, phi, x, measured }: Given, rows: number) {
  const batch = kernels.createBatch(lossShape.inputs, lossShape.joints)
  batch.loadNormalised(x, measured, rows)
  return { network: kernels.loadNetwork(shape, theta), loss: kernels.loadLoss(name, lossShape, phi), batch }
}

/** The double-precision gradient and loss. */
function reference(name: LossName, scheme: NetworkScheme, given: Given, rows: number, theta = given.theta, first = 0) {
  const { shape, lossShape, phi } = given
  const x = given.x.slice(first * lossShape.inputs)
  const measured = given.measured.slice(first * lossShape.joints)
  const pass = createNetworkPass(shape, rows)
  const predicted = new Float64Array(rows * lossShape.joints)
  const slope = new Float64Array(rows * lossShape.joints)
  const gradient = new Float64Array(parameterCount(shape))
  const weights = new Float64Array(lossShape.joints)
  forward(pass, theta, x, rows, predicted)
  const loss = lossKinds[name].create(lossShape, rows)
  const value = loss.gradient(phi, { rows, x, measured, predicted }, slope)
  loss.weights(phi, { rows, x, measured, predicted }, weights)
  backward(pass, theta, slope, firstTrainedLayer(shape, scheme), gradient)
  return { value, gradient, weights, slope, predicted }
}

function largest(values: ArrayLike<number>): number {
  return Array.from(values).reduce((most, value) => Math.max(most, Math.abs(value)), 0)
}

function furthest(got: ArrayLike<number>, want: ArrayLike<number>): number {
  return Array.from(want).reduce((most, value, k) => Math.max(most, Math.abs(value - got[k])), 0)
}

// Each value goes through at most four layers of sums of 64 products, forward and back: 8 · √128 · 2⁻²⁵ = 2.7e-6 of the
// largest is what random roundings come to.
const relative = 3e-6

describe.each(cases)('$name ($positive), $scheme of a $activation network of $joints joints', (given) => {
  const { name, scheme } = given

  it.each([1, 4, 7, 75])('has the gradient, loss and weights of the double-precision reference on %i rows', (rows) => {
    const start = setUp(given, rows)
    const kernels = createKernels()
    const { network, loss, batch } = load(kernels, name, start, rows)

    const gradient = new Float32Array(network.parameterCount)
    const value = kernels.gradient(network, loss, batch, { scheme }, gradient)
    const weights = kernels.meanWeights(loss, batch, {}, new Float64Array(given.joints), network)

    const want = reference(name, scheme, start, rows)
    expect(furthest(gradient, want.gradient)).toBeLessThan(relative * largest(want.gradient))
    expect(Math.abs(value - want.value)).toBeLessThan(relative * want.value)
    expect(furthest(weights, want.weights)).toBeLessThan(relative * largest(want.weights))
  })

  it.each(['sgd', 'adam'] as UpdateName[])('takes the steps of the reference under %s, the last on what is left', (update) => {
    const rows = 22
    const rate = update === 'sgd' ? 0.05 : 0.003
    const start = setUp(given, rows)
    const kernels = createKernels()
    const { network, loss, batch } = load(kernels, name, start, rows)
    const moments = update === 'adam' ? kernels.createMoments(network) : undefined

    const report = kernels.step(network, loss, batch, { scheme, rate, rowsPerStep: 4, moments })

    const theta = start.theta.slice()
    const state = updateKinds[update].initialState(theta.length)
    for (let first = 0; first < rows; first += 4) {
      const { gradient } = reference(name, scheme, start, Math.min(4, rows - first), theta, first)
      updateKinds[update].step(theta, gradient, state, rate)
    }
    expect(report.steps).toBe(6)
    // Adam divides by the gradient's own size: where a gradient is nearly 0 its relative error, and with it a step's, is
    // larger than the largest parameter's; a thousandth of the rate a step is what is left to be seen.
    const allowed = update === 'sgd' ? relative * largest(theta) : 6 * 1e-3 * rate
    expect(furthest(network.read(), theta)).toBeLessThan(allowed)
    if (moments !== undefined) expect(furthest(moments.read(), state)).toBeLessThan(10 * relative * largest(state))
  })
})

describe('step', () => {
  const given = {
    name: 'state_dependent', positive: 'exp', activation: 'relu', joints: 7, hidden: [64, 64], lossHidden: 32,
  } as const
  const settings = { scheme: 'all', rate: 0.02, rowsPerStep: 4 } as const

  it('does the same to the bit in two instances, whatever was done before, and on a copy', () => {
    const rows = 64
    const start = setUp({ ...given, hidden: [...given.hidden] }, rows)
    const [first, second] = [createKernels(), createKernels()]
    const a = load(first, given.name, start, rows)
    const small = setUp({ ...given, name: 'unstructured', joints: 3, hidden: [17] }, 30)
    const other = load(second, 'unstructured', small, 30)
    second.step(other.network, other.loss, other.batch, { ...settings, moments: second.createMoments(other.network) })
    const b = load(second, given.name, start, rows)
    const copy = b.network.clone()

    first.step(a.network, a.loss, a.batch, settings)
    second.step(b.network, b.loss, b.batch, settings)
    second.step(copy, b.loss, b.batch, settings)

    expect(bits(b.network.read())).toEqual(bits(a.network.read()))
    expect(bits(copy.read())).toEqual(bits(a.network.read()))
    expect(second.distance(copy, b.network)).toBe(0)
  })

  it('continues from moments that were read and written back to the same bits', () => {
    const rows = 32
    const start = setUp({ ...given, hidden: [...given.hidden] }, rows)
    const kernels = createKernels()
    const { network, loss, batch } = load(kernels, given.name, start, rows)
    const moments = kernels.createMoments(network)
    kernels.step(network, loss, batch, { ...settings, moments })
    const restoredNetwork = kernels.loadNetwork(start.shape, network.read())
    const restored = kernels.createMoments(network)
    restored.write(moments.read())

    kernels.step(network, loss, batch, { ...settings, moments })
    kernels.step(restoredNetwork, loss, batch, { ...settings, moments: restored })

    expect(bits(restoredNetwork.read())).toEqual(bits(network.read()))
    expect(restored.read()).toEqual(moments.read())
  })

  it('leaves an evaluation after it as it was before', () => {
    const rows = 40
    const start = setUp({ ...given, hidden: [...given.hidden] }, rows)
    const kernels = createKernels()
    const { network, loss, batch } = load(kernels, given.name, start, rows)
    const before = kernels.forward(network, start.x, rows, new Float32Array(rows * 7))
    const predicted = new Float32Array(rows * 7)

    kernels.step(network.clone(), loss, batch, settings)
    kernels.errors(network, batch, {}, new Float64Array(7), predicted)

    expect(bits(kernels.forward(network, start.x, rows, new Float32Array(rows * 7)))).toEqual(bits(before))
    expect(bits(predicted)).toEqual(bits(before))
  })

  it('lets a NaN in the gradient through to the parameters, for the guards to see', () => {
    const start = setUp({ ...given, hidden: [...given.hidden] }, 4)
    start.measured[3] = NaN
    const kernels = createKernels()
    const { network, loss, batch } = load(kernels, given.name, start, 4)

    kernels.step(network, loss, batch, { ...settings, moments: kernels.createMoments(network) })

    expect(network.read().some(Number.isNaN)).toBe(true)
    expect(kernels.distance(network, network.clone())).toBeNaN()
  })

  it('steps on a range of rows as on a batch of those rows', () => {
    const start = setUp({ ...given, hidden: [...given.hidden] }, 48)
    const kernels = createKernels()
    const { network, loss, batch } = load(kernels, given.name, start, 48)
    const other = network.clone()
    const part = kernels.createBatch(21, 7)
    part.loadNormalised(start.x.slice(5 * 21), start.measured.slice(5 * 7), 30)

    kernels.step(network, loss, batch, { ...settings, from: 5, to: 35 })
    kernels.step(other, loss, part, settings)

    expect(bits(other.read())).toEqual(bits(network.read()))
  })

  it('sets moments that have faded away to zero, before they become subnormal and slow', () => {
    const start = setUp({ ...given, hidden: [...given.hidden] }, 4)
    const kernels = createKernels()
    const { network, loss, batch } = load(kernels, 'mse', { ...start, phi: new Float64Array(0) }, 4)
    const moments = kernels.createMoments(network)
    const state = moments.read()
    moments.write(state.map((value, k) => (k < 2 ? value : 1e-29)))
    network.write(start.theta.map(() => 0))

    for (let step = 0; step < 60; step++) kernels.step(network, loss, batch, { ...settings, rate: 1e-6, moments })

    // With all weights 0 only the last biases have a gradient; the first moments of the others fade to 0.9⁶⁰ · 1e-29 = 2e-32.
    const after = moments.read().slice(2, 2 + network.parameterCount)
    expect(after.slice(0, -7).every((value) => value === 0)).toBe(true)
    expect(after.slice(-7).every((value) => Math.abs(value) > 1e-3)).toBe(true)
  })

  it('refuses what does not fit together', () => {
    const start = setUp({ ...given, hidden: [...given.hidden] }, 8)
    const kernels = createKernels()
    const { network, loss, batch } = load(kernels, given.name, start, 8)
    const foreign = createKernels().loadNetwork(start.shape, start.theta)
    const small = kernels.createBatch(6, 2)
    small.loadNormalised(numbers(1, 60), numbers(1, 20), 10)

    expect(() => kernels.step(foreign, loss, batch, settings)).toThrow('This handle belongs to other kernels.')
    expect(() => kernels.step(network, loss, small, settings)).toThrow(/21 inputs and gives 7; the batch has 6 and 2/)
    expect(() => kernels.step(network, loss, batch, { ...settings, from: 8 })).toThrow(/Rows 8 to 8 of a batch of 8/)
    expect(() => kernels.step(network, loss, batch, { ...settings, rate: 0 })).toThrow(/rate is 0/)
    expect(() => kernels.step(network, loss, batch, { ...settings, rowsPerStep: 0.5 })).toThrow(/rowsPerStep is 0.5/)
  })
})

describe('losses of given predictions', () => {
  it.each(names)('%s gives slope and weights of the reference', (name) => {
    const rows = 37
    const given = { name, positive: 'softplus', activation: 'relu', joints: 5, hidden: [17], lossHidden: 5 } as const
    const start = setUp({ ...given, hidden: [17] }, rows)
    const kernels = createKernels()
    const { loss, batch } = load(kernels, name, start, rows)
    const want = reference(name, 'all', start, rows)

    const slope = new Float32Array(rows * 5)
    const weights = new Float64Array(5)
    kernels.predictionGradient(loss, batch, {}, want.predicted, slope, weights)

    expect(furthest(slope, want.slope)).toBeLessThan(relative * largest(want.slope))
    expect(furthest(weights, want.weights)).toBeLessThan(relative * largest(want.weights))
  })

  it('weights of rows average to the mean weights', () => {
    const rows = 37
    const given = { name: 'state_dependent', positive: 'exp', activation: 'relu', joints: 3, lossHidden: 17 } as const
    const kernels = createKernels()
    const { loss, batch } = load(kernels, given.name, setUp({ ...given, hidden: [5] }, rows), rows)

    const each = kernels.weightsOfRows(loss, batch, {}, new Float32Array(rows * 3))
    const means = kernels.meanWeights(loss, batch, {}, new Float64Array(3))

    for (let joint = 0; joint < 3; joint++) {
      const own = each.filter((_, k) => k % 3 === joint)
      // Both sum in f64; only the order differs.
      expect(means[joint]).toBeCloseTo([...own].reduce((sum, value) => sum + value, 0) / rows, 12)
    }
    expect(new Set(each).size).toBeGreaterThan(rows)
  })
})

describe('errors', () => {
  it('are the mean squares of measured − predicted, per joint', () => {
    const rows = 45
    const given = { name: 'mse', positive: 'exp', activation: 'tanh', joints: 6, lossHidden: 5 } as const
    const start = setUp({ ...given, hidden: [17, 5] }, rows)
    const kernels = createKernels()
    const { network, batch } = load(kernels, 'mse', start, rows)

    const squares = kernels.errors(network, batch, { from: 2, to: 40 }, new Float64Array(6))

    const { predicted } = reference('mse', 'all', start, rows)
    const want = new Float64Array(6)
    for (let row = 2; row < 40; row++) {
      for (let joint = 0; joint < 6; joint++) {
        want[joint] += (start.measured[row * 6 + joint] - predicted[row * 6 + joint]) ** 2 / 38
      }
    }
    expect(furthest(squares, want)).toBeLessThan(relative * largest(want))
  })

  it('of a loaded motion are those of its normalised rows', () => {
    const kernels = createKernels()
    const normalisation = {
      inputMean: numbers(1, 6), inputStd: numbers(2, 6).map((value) => 2 + value),
      outputMean: numbers(3, 2), outputStd: numbers(4, 2).map((value) => 2 + value),
    }
    const motion = { position: numbers(5, 40), velocity: numbers(6, 40), acceleration: numbers(7, 40) }
    const torque = numbers(8, 40)
    const shape: NetworkShape = { sizes: [6, 5, 2], activation: 'relu' }
    const network = kernels.loadNetwork(shape, initialParameters(shape, createRandom(9)))
    const batch = kernels.createBatch(6, 2)

    batch.load(kernels.loadNormalisation(normalisation), motion, torque, 20)
    const squares = kernels.errors(network, batch, {}, new Float64Array(2))

    const predicted = kernels.predict(network, kernels.loadNormalisation(normalisation), motion, 20, new Float64Array(40))
    for (let joint = 0; joint < 2; joint++) {
      let want = 0
      for (let row = 0; row < 20; row++) {
        want += ((torque[row * 2 + joint] - predicted[row * 2 + joint]) / normalisation.outputStd[joint]) ** 2 / 20
      }
      // The measured torque is rounded to f32 on the way in.
      expect(Math.abs(squares[joint] - want)).toBeLessThan(1e-6 * want)
    }
  })
})

function bits(values: Float32Array): number[] {
  return [...new Uint32Array(values.slice().buffer)]
}

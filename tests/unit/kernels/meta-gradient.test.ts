import { describe, expect, it } from 'vitest'
import { createKernels, type NetworkScheme } from '../../../shared/dynamics/kernels/kernels.ts'
import { createKernelMetaGradient } from '../../../shared/dynamics/kernels/meta-gradient.ts'
import { lossKinds, type LossName, type LossShape, type Positive } from '../../../shared/dynamics/losses/index.ts'
import { createMetaGradient, type ChainShape } from '../../../shared/dynamics/meta-gradient.ts'
import { initialParameters, type Activation } from '../../../shared/dynamics/network.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { numbers } from './numbers.ts'

const names: LossName[] = ['mse', 'structured', 'state_dependent', 'unstructured']
const cases = names.flatMap((loss, index) =>
  (['exp', 'softplus'] as Positive[]).flatMap((positive, third) =>
    (['relu', 'tanh'] as Activation[]).flatMap((activation, offset) =>
      (['all', 'last_layer'] as NetworkScheme[]).map((scheme, shift) => {
        const joints = 1 + ((index * 2 + third * 3 + offset + shift * 5) % 7)
        const hidden = [[5], [17, 5], [64, 64]][(joints + shift) % 3]
        const steps = [1, 4, 15][(index + offset) % 3]
        return { loss, positive, activation, scheme, joints, hidden, steps, rowsPerStep: [4, 3, 6][third + shift] }
      }),
    ),
  ),
)

function setUp({ loss, positive, activation, scheme, joints, hidden, steps, rowsPerStep }: (typeof cases)[number]) {
  const lossShape: LossShape = { joints, inputs: 3 * joints, hidden: [5, 17, 32][joints % 3], positive }
  const shape: ChainShape = {
    scheme, network: { sizes: [3 * joints, ...hidden, joints], activation }, loss, lossShape, steps, rowsPerStep,
  }
  const rows = (steps + 1) * rowsPerStep
  const phi = lossKinds[loss].initialParameters(lossShape, createRandom(2))
  const round = (values: Float64Array) => values.map(Math.fround)
  return {
    shape,
    stretch: {
      x: round(numbers(3, rows * 3 * joints)),
      measured: round(numbers(4, rows * joints).map((value) => 2 * value)),
      base: new Float64Array(0),
      ahead: new Float64Array(0),
    },
    theta: round(initialParameters(shape.network, createRandom(1))),
    learned: Float64Array.from([...round(phi.map((value, k) => value + 0.2 * numbers(5, phi.length)[k])), Math.log(0.03)]),
  }
}

function largest(values: ArrayLike<number>): number {
  return Array.from(values).reduce((most, value) => Math.max(most, Math.abs(value)), 0)
}

function furthest(got: ArrayLike<number>, want: ArrayLike<number>): number {
  return Array.from(want).reduce((most, value, k) => Math.max(most, Math.abs(value - got[k])), 0)
}

// One step's gradient is good to 3e-6 of its largest (step.test.ts); a chain of up to 15 steps and its sweep back add up 30
// of them at random, √30 · 3e-6 = 1.6e-5.
const relative = 2e-5

describe('the hypergradient of the kernels', () => {
  it.each(cases)('is the double-precision one: $loss $positive $scheme $activation, $joints joints, $steps steps', (given) => {
    const { shape, stretch, theta, learned } = setUp(given)
    const fast = createKernelMetaGradient(createKernels(), shape)
    const exact = createMetaGradient(shape)
    const [gradient, want] = [new Float64Array(fast.learnedCount), new Float64Array(exact.learnedCount)]
    const [adapted, wanted] = [theta.slice(), theta.slice()]

    const outer = fast.compute(stretch, adapted, learned, gradient)

    const wantedOuter = exact.compute(stretch, wanted, learned, want)
    expect(Math.abs(outer - wantedOuter)).toBeLessThan(relative * wantedOuter)
    expect(furthest(adapted, wanted)).toBeLessThan(relative * largest(wanted))
    const [phi, wantedPhi] = [gradient.subarray(0, -1), want.subarray(0, -1)]
    if (phi.length > 0) expect(furthest(phi, wantedPhi)).toBeLessThan(relative * largest(wantedPhi))
    // The step size's derivative sums steps that help and steps that don't; the others' size tells what cancelled.
    expect(Math.abs(gradient.at(-1)! - want.at(-1)!)).toBeLessThan(relative * largest(want))
  })

  it('is the same to the bit in two instances and when asked again', () => {
    const given = cases.find(({ loss, scheme }) => loss === 'state_dependent' && scheme === 'all')!
    const { shape, stretch, theta, learned } = setUp(given)
    const [first, second] = [createKernelMetaGradient(createKernels(), shape), createKernelMetaGradient(createKernels(), shape)]
    const results = [first, second, first].map((fast) => {
      const gradient = new Float64Array(fast.learnedCount)
      const adapted = theta.slice()
      return { outer: fast.compute(stretch, adapted, learned, gradient), adapted, gradient }
    })

    expect(results[1]).toEqual(results[0])
    expect(results[2]).toEqual(results[0])
  })

  it('gives its memory back', () => {
    const { shape, stretch, theta, learned } = setUp(cases.find(({ loss }) => loss === 'unstructured')!)
    const kernels = createKernels()
    const run = () => {
      const fast = createKernelMetaGradient(kernels, shape)
      fast.compute(stretch, theta.slice(), learned, new Float64Array(fast.learnedCount))
      fast.free()
    }
    run()
    const before = kernels.usedBytes

    for (let round = 0; round < 20; round++) run()

    expect(kernels.usedBytes).toBe(before)
  })

  it('says that the bias scheme has none', () => {
    const { shape } = setUp(cases[0])

    expect(() => createKernelMetaGradient(createKernels(), { ...shape, scheme: 'bias' })).toThrow(/createMetaGradient/)
  })
})

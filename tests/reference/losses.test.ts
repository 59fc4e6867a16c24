// Source of the expected values: data/losses.json, computed in double precision by an independent
// automatic-differentiation library; its `about` holds the formulas.
import { readFileSync } from 'node:fs'
import { describe, expect, test } from 'vitest'
import { lossKinds, type LossName, type LossShape, type Positive } from '../../shared/dynamics/losses/index.ts'
import { createMetaGradient } from '../../shared/dynamics/meta-gradient.ts'
import { backward, createNetworkPass, forward, type Activation } from '../../shared/dynamics/network.ts'
import { updateKinds } from '../../shared/dynamics/updates/index.ts'

interface ReferenceCase {
  activation: Activation
  loss: 'mse' | 'const' | 'state' | 'mlp'
  weight_param: Positive | null
  phi: Record<string, number[] | number[][]>
  prediction: number[][]
  loss_value: number
  dloss_dtheta: Theta
  theta_after_step: Theta
  outer_mse_next: number
  douter_dphi: Record<string, number[] | number[][]>
}
interface Theta {
  W1: number[][]
  b1: number[]
  W2: number[][]
  b2: number[]
}
interface Reference {
  lr: number
  theta: Theta
  data: Record<'x' | 'tau' | 'x_next' | 'tau_next', number[][]>
  cases: ReferenceCase[]
}

const reference: Reference = JSON.parse(readFileSync(new URL('data/losses.json', import.meta.url), 'utf8'))

// Two double-precision programs that sum in different orders differ by a few units in the last place; values are of order 1.
const tolerance = 1e-10

const kinds: Record<ReferenceCase['loss'], LossName> = {
  mse: 'mse',
  const: 'structured',
  state: 'state_dependent',
  mlp: 'unstructured',
}
const phiOrder: Record<ReferenceCase['loss'], string[]> = {
  mse: [],
  const: ['a'],
  state: ['V1', 'c1', 'V2', 'c2'],
  mlp: ['U1', 'd1', 'U2', 'd2'],
}

const flat = (value: number | number[] | number[][]) => [value].flat(2)
const flatTheta = ({ W1, b1, W2, b2 }: Theta) => Float64Array.from([W1.flat(), b1, W2.flat(), b2].flat())
const rows = reference.data.x.length
const joints = reference.data.tau[0].length
const inputs = reference.data.x[0].length

describe.each(reference.cases)('$loss loss, $activation, $weight_param', (given) => {
  const kind = lossKinds[kinds[given.loss]]
  const phi = Float64Array.from(phiOrder[given.loss].flatMap((name) => flat(given.phi[name])))
  const lossShape: LossShape = {
    joints,
    inputs,
    hidden: given.loss === 'state' ? given.phi.c1.length : given.loss === 'mlp' ? given.phi.d1.length : 0,
    positive: given.weight_param ?? 'exp',
  }
  const network = { sizes: [inputs, reference.theta.b1.length, joints], activation: given.activation }
  const theta = flatTheta(reference.theta)
  const x = Float64Array.from(reference.data.x.flat())
  const measured = Float64Array.from(reference.data.tau.flat())

  test('prediction, loss, gradient and stepped parameters agree with the reference', () => {
    const pass = createNetworkPass(network, rows)
    const predicted = new Float64Array(rows * joints)
    const slope = new Float64Array(rows * joints)
    const gradient = new Float64Array(theta.length)
    const stepped = theta.slice()

    forward(pass, theta, x, rows, predicted)
    const value = kind.create(lossShape, rows).gradient(phi, { rows, x, measured, predicted }, slope)
    backward(pass, theta, slope, 0, gradient)
    updateKinds.sgd.step(stepped, gradient, updateKinds.sgd.initialState(theta.length), reference.lr)

    expectClose(predicted, given.prediction.flat())
    expectClose([value], [given.loss_value])
    expectClose(gradient, flatTheta(given.dloss_dtheta))
    expectClose(stepped, flatTheta(given.theta_after_step))
  })

  test('outer error and hypergradient agree with the reference', () => {
    const meta = createMetaGradient({
      scheme: 'all', network, loss: kind.name, lossShape, steps: 1, rowsPerStep: rows,
    })
    const learned = Float64Array.from([...phi, Math.log(reference.lr)])
    const gradient = new Float64Array(learned.length)
    const stretch = {
      x: Float64Array.from([...x, ...reference.data.x_next.flat()]),
      measured: Float64Array.from([...measured, ...reference.data.tau_next.flat()]),
      base: new Float64Array(0),
      ahead: new Float64Array(0),
    }

    const outer = meta.compute(stretch, theta.slice(), learned, gradient)

    expectClose([outer], [given.outer_mse_next])
    const wanted = phiOrder[given.loss].flatMap((name) => flat(given.douter_dphi[name]))
    expect(kind.parameterCount(lossShape)).toBe(wanted.length)
    expectClose(gradient.subarray(0, phi.length), wanted)
  })
})

test('the reference holds every kind of loss with both activations and both positive maps', () => {
  const found = reference.cases.map(({ loss, activation, weight_param }) => `${loss} ${activation} ${weight_param}`)

  expect(new Set(found).size).toBe(12)
})

function expectClose(found: ArrayLike<number>, wanted: ArrayLike<number>): void {
  expect(found.length).toBe(wanted.length)
  for (let k = 0; k < wanted.length; k++) expect(Math.abs(found[k] - wanted[k])).toBeLessThan(tolerance)
}

// Source of the expected values: data/losses.json, computed in double precision by an independent
// automatic-differentiation library; its `about` holds the formulas. losses.test.ts checks the double-precision path.
import { readFileSync } from 'node:fs'
import { describe, expect, test } from 'vitest'
import { createKernels } from '../../shared/dynamics/kernels/kernels.ts'
import { createKernelMetaGradient } from '../../shared/dynamics/kernels/meta-gradient.ts'
import type { LossName, LossShape, Positive } from '../../shared/dynamics/losses/index.ts'
import type { Activation } from '../../shared/dynamics/network.ts'

type Numbers = number | number[] | number[][]
interface ReferenceCase {
  activation: Activation
  loss: 'mse' | 'const' | 'state' | 'mlp'
  weight_param: Positive | null
  phi: Record<string, Numbers>
  prediction: Numbers
  loss_value: number
  dloss_dtheta: Record<string, Numbers>
  theta_after_step: Record<string, Numbers>
  outer_mse_next: number
  douter_dphi: Record<string, Numbers>
}
interface Reference {
  lr: number
  theta: Record<'W1' | 'W2', number[][]> & Record<'b1' | 'b2', number[]>
  data: Record<'x' | 'tau' | 'x_next' | 'tau_next', number[][]>
  cases: ReferenceCase[]
}

const reference: Reference = JSON.parse(readFileSync(new URL('data/losses.json', import.meta.url), 'utf8'))

// Inputs and parameters are rounded to 24 bits on the way in and every operation rounds again; values are of order 1, chains
// about fifty roundings long: √50 · 2⁻²⁵ = 2e-7, times five for the worst of all values.
const tolerance = 1e-6

const kinds: Record<ReferenceCase['loss'], LossName> = {
  mse: 'mse', const: 'structured', state: 'state_dependent', mlp: 'unstructured',
}
const phiOrder: Record<ReferenceCase['loss'], string[]> = {
  mse: [], const: ['a'], state: ['V1', 'c1', 'V2', 'c2'], mlp: ['U1', 'd1', 'U2', 'd2'],
}
const inOrder = (parts: Record<string, Numbers>, names: string[]) => names.flatMap((name) => [parts[name]].flat(2))
const thetaOrder = ['W1', 'b1', 'W2', 'b2']

const { data } = reference
const rows = data.x.length
const joints = data.tau[0].length
const inputs = data.x[0].length

describe.each(reference.cases)('the kernels under $loss loss, $activation, $weight_param', (given) => {
  const name = kinds[given.loss]
  const phi = inOrder(given.phi, phiOrder[given.loss])
  const lossShape: LossShape = {
    joints,
    inputs,
    hidden: [given.phi.c1 ?? given.phi.d1 ?? []].flat().length,
    positive: given.weight_param ?? 'exp',
  }
  const network = { sizes: [inputs, reference.theta.b1.length, joints], activation: given.activation }
  const theta = inOrder(reference.theta, thetaOrder)

  test('prediction, loss, gradient and stepped parameters agree with the reference', () => {
    const kernels = createKernels()
    const handle = kernels.loadNetwork(network, theta)
    const loss = kernels.loadLoss(name, lossShape, phi)
    const batch = kernels.createBatch(inputs, joints)
    batch.loadNormalised(data.x.flat(), data.tau.flat(), rows)
    const gradient = new Float32Array(theta.length)
    const predicted = kernels.forward(handle, data.x.flat(), rows, new Float32Array(rows * joints))

    const value = kernels.gradient(handle, loss, batch, { scheme: 'all' }, gradient)
    kernels.step(handle, loss, batch, { scheme: 'all', rate: reference.lr, rowsPerStep: rows })

    expectClose(predicted, [given.prediction].flat(2))
    expectClose([value], [given.loss_value])
    expectClose(gradient, inOrder(given.dloss_dtheta, thetaOrder))
    expectClose(handle.read(), inOrder(given.theta_after_step, thetaOrder))
  })

  test('outer error and hypergradient agree with the reference', () => {
    const meta = createKernelMetaGradient(createKernels(), {
      scheme: 'all', network, loss: name, lossShape, steps: 1, rowsPerStep: rows,
    })
    const learned = Float64Array.from([...phi, Math.log(reference.lr)])
    const gradient = new Float64Array(learned.length)
    const stretch = {
      x: Float64Array.from([...data.x, ...data.x_next].flat()),
      measured: Float64Array.from([...data.tau, ...data.tau_next].flat()),
      base: new Float64Array(0),
      ahead: new Float64Array(0),
    }

    const outer = meta.compute(stretch, Float64Array.from(theta), learned, gradient)

    expectClose([outer], [given.outer_mse_next])
    expectClose(gradient.subarray(0, phi.length), inOrder(given.douter_dphi, phiOrder[given.loss]))
  })
})

function expectClose(found: ArrayLike<number>, wanted: ArrayLike<number>): void {
  expect(found.length).toBe(wanted.length)
  for (let k = 0; k < wanted.length; k++) expect(Math.abs(found[k] - wanted[k])).toBeLessThan(tolerance)
}

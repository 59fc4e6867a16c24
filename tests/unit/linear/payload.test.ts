import { describe, expect, test } from 'vitest'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { attachPayload, createChain, inverseDynamics } from '../../../shared/dynamics/rigid-body/index.ts'
import { createPayloadBasis } from '../../../shared/dynamics/linear/basis.ts'
import { estimatePayload, implausibilities } from '../../../shared/dynamics/linear/payload-estimate.ts'
import { createRecursiveUpdate } from '../../../shared/dynamics/linear/recursive.ts'
import { stepThrough } from '../../../shared/dynamics/linear/update.ts'
import { exampleChain } from '../rigid-body/example-chain.ts'

const joints = 6
const outputStd = [3, 2, 5, 1, 4, 0.5]
const chain = exampleChain()
const payload = { mass: 1.7, centerOfMass: [0.03, -0.02, 0.09] as [number, number, number] }

const friction = Array.from({ length: joints }, () => ({
  viscous: 0.4, coulomb: 1, stribeck: 0.3, stribeckVelocity: 0.1, smoothing: 0.03,
}))

function statesOf(rows: number, seed: number): Float64Array {
  const random = createRandom(seed)
  return Float64Array.from({ length: rows * 3 * joints }, () => random.normal())
}

/** Torque that a payload adds, by two evaluations of inverse dynamics, in base standard deviations. */
function addedTorque(states: Float64Array, rows: number): Float64Array {
  const arm = createChain(chain)
  const out = new Float64Array(rows * joints)
  const tau = new Float64Array(joints)
  for (const [sign, load] of [[-1, { mass: 0, centerOfMass: [0, 0, 0] as [number, number, number] }], [1, payload]] as const) {
    attachPayload(arm, load)
    for (let row = 0; row < rows; row++) {
      const s = states.subarray(row * 3 * joints, (row + 1) * 3 * joints)
      inverseDynamics(arm, s.slice(0, joints), s.slice(joints, 2 * joints), s.slice(2 * joints), tau)
      for (let j = 0; j < joints; j++) out[row * joints + j] += (sign * tau[j]) / outputStd[j]
    }
  }
  return out
}

describe('the payload basis', () => {
  test('times (mass / 2, moment / 0.2) is what a compact payload adds to inverse dynamics at rest', () => {
    // At rest a point's own inertia about the flange plays no part, and the regressor is exact.
    const states = statesOf(20, 1)
    states.forEach((_, k) => { if (k % (3 * joints) >= joints) states[k] = 0 })
    const basis = createPayloadBasis({ chain, outputStd, friction: null })
    const a = new Float64Array(20 * joints * 4)

    basis.evaluate(states, 20, a)

    const z = [payload.mass / 2, ...payload.centerOfMass.map(value => (payload.mass * value) / 0.2)]
    addedTorque(states, 20).forEach((want, k) => {
      expect(z.reduce((sum, value, c) => sum + value * a[k * 4 + c], 0)).toBeCloseTo(want, 11)
    })
  })

  test('finds mass, centre of mass and friction scale of an arm that has them, within four standard deviations', () => {
    const rows = 800
    const states = statesOf(rows, 2)
    const basis = createPayloadBasis({ chain, outputStd, friction })
    const table = new Float64Array(rows * joints * 5)
    basis.evaluate(states, rows, table)
    const random = createRandom(3)
    const z = [payload.mass / 2, ...payload.centerOfMass.map(value => (payload.mass * value) / 0.2), 0.25 / 0.2]
    const residual = Float64Array.from({ length: rows * joints }, (_, k) =>
      z.reduce((sum, value, c) => sum + value * table[k * 5 + c], 0.05 * random.normal()))
    const update = createRecursiveUpdate({
      rowsPerStep: 4, decay: 1, initialFactor: [1, 0, 1, 0, 0, 1, 0, 0, 0, 1, 0, 0, 0, 0, 1],
      initialBias: new Array<number>(joints).fill(1e-4),
      driftOfState: new Array<number>(5).fill(1e-9), driftOfBias: new Array<number>(joints).fill(1e-6),
      noise: new Array<number>(joints).fill(0.0025),
      threshold: 9, opening: new Array<number>(5).fill(0.5),
    }, 5, joints)
    const state = update.initial()

    const time = Float64Array.from({ length: rows }, (_, k) => 0.02 * k)
    stepThrough(update, state, { time, x: states, residual, basis: table }, 0, rows)

    const { mass, massStd, centerOfMass, centerOfMassStd, frictionScale, frictionScaleStd } = estimatePayload(state, 5)
    expect(massStd).toBeLessThan(0.05)
    expect(Math.abs(mass - payload.mass)).toBeLessThan(4 * massStd)
    payload.centerOfMass.forEach((value, k) => expect(Math.abs(centerOfMass![k] - value)).toBeLessThan(4 * centerOfMassStd![k]))
    expect(Math.abs(frictionScale! - 1.25)).toBeLessThan(4 * frictionScaleStd!)
    expect(implausibilities(estimatePayload(state, 5))).toEqual([])
  })
})

describe('plausibility', () => {
  const sure = {
    mass: 1, massStd: 0.01, centerOfMass: [0, 0, 0.1], centerOfMassStd: [0.01, 0.01, 0.01],
    frictionScale: null, frictionScaleStd: null,
  } as const

  test.each([
    [{ mass: -0.5 }, /cannot be below 0/],
    [{ mass: 12 }, /above the 10 kg/],
    [{ centerOfMass: [0, 0, 0.8] as const }, /0.80 m from the flange/],
    [{ frictionScale: 4, frictionScaleStd: 0.1 }, /4.00 times/],
    [{ mass: NaN }, /cannot be below 0/],
  ])('names what cannot be: %j', (wrong, message) => {
    expect(implausibilities({ ...sure, ...wrong }).join(' ')).toMatch(message)
  })

  test('says nothing while little is known', () => {
    expect(implausibilities({ ...sure, mass: -1, massStd: 1 })).toEqual([])
    expect(implausibilities(sure)).toEqual([])
  })
})

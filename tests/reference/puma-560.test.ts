// Outside source: PUMA 560, parameters in standard Denavit–Hartenberg form and torques as published (Corke &
// Armstrong-Hélouvry, "A search for consensus among model parameters reported for the PUMA 560 robot", 1994, and worked
// examples built on it). The values are rigid-body ones: no rotor inertia, no friction.
import { describe, expect, it } from 'vitest'
import {
  IDENTITY,
  compose,
  createChain,
  inverseDynamics,
  rotationFromRollPitchYaw,
} from '../../shared/dynamics/rigid-body/index.ts'
import type { ChainDescription, Inertial, Placement, Vector3 } from '../../shared/dynamics/rigid-body/index.ts'

const alpha = [Math.PI / 2, 0, -Math.PI / 2, Math.PI / 2, -Math.PI / 2, 0]
const a = [0, 0.4318, 0.0203, 0, 0, 0]
const d = [0, 0, 0.15005, 0.4318, 0, 0]
const mass = [0, 17.4, 4.8, 0.82, 0.34, 0.09]
const centerOfMass: Vector3[] = [
  [0, 0, 0],
  [-0.3638, 0.006, 0.2275],
  [-0.0203, -0.0141, 0.07],
  [0, 0.019, 0],
  [0, 0, 0],
  [0, 0, 0.032],
]
const inertia: Vector3[] = [
  [0, 0.35, 0],
  [0.13, 0.524, 0.539],
  [0.066, 0.086, 0.0125],
  [1.8e-3, 1.3e-3, 1.8e-3],
  [0.3e-3, 0.4e-3, 0.3e-3],
  [0.15e-3, 0.15e-3, 0.04e-3],
]

// Torques are printed with four or five decimals.
const published = [
  { q: [0, 0, 0, 0, 0, 0], rate: 0, torque: [0, 37.4837, 0.2489, 0, 0, 0], decimals: 4 },
  { q: [0, Math.PI / 4, Math.PI, 0, Math.PI / 4, 0], rate: 0, torque: [0, 31.6399, 6.0351, 0, 0.0283, 0], decimals: 4 },
  {
    q: [45, 70, -100, 60, 25, -140].map((degrees) => (degrees * Math.PI) / 180),
    rate: 0,
    torque: [0, 16.36782, 4.59518, -0.00517, -0.00394, 0],
    decimals: 5,
  },
  {
    q: [0, Math.PI / 4, Math.PI, 0, Math.PI / 4, 0],
    rate: 1,
    torque: [2.56908, 33.6777, 6.84909, -0.00075, 0.03273, 0.00007],
    decimals: 5,
  },
]

describe('PUMA 560 against published torques', () => {
  for (const { q, rate, torque, decimals } of published) {
    it(`at q = (${q.map((value) => value.toFixed(2)).join(', ')}), acceleration ${rate}`, () => {
      const chain = createChain(puma())
      const tau = new Float64Array(6)
      inverseDynamics(chain, Float64Array.from(q), new Float64Array(6), new Float64Array(6).fill(rate), tau)

      tau.forEach((value, joint) =>
        expect(Math.abs(value - torque[joint]), `joint ${joint + 1}: ${value}`).toBeLessThan(0.51 * 10 ** -decimals),
      )
    })
  }
})

// Standard form puts a link's frame at its far end: joint i turns about z of frame i − 1, then d, a and α lead to frame i.
function puma(): ChainDescription {
  const ends: Placement[] = alpha.map((angle, i) => ({
    position: [a[i], 0, d[i]],
    rotation: rotationFromRollPitchYaw(angle, 0, 0),
  }))
  return {
    joints: ends.map((end, i) => ({
      name: `joint_${i + 1}`,
      kind: 'revolute',
      axis: [0, 0, 1],
      offset: i === 0 ? { position: [0, 0, 0], rotation: IDENTITY } : ends[i - 1],
      inertial: place(end, {
        mass: mass[i],
        centerOfMass: centerOfMass[i],
        inertia: [inertia[i][0], 0, 0, inertia[i][1], 0, inertia[i][2]],
      }),
    })),
    gravity: [0, 0, -9.81],
    flange: ends[5],
  }
}

function place(frame: Placement, body: Inertial): Inertial {
  const r = frame.rotation
  const diagonal = [body.inertia[0], body.inertia[3], body.inertia[5]]
  const entry = (row: number, column: number): number =>
    diagonal.reduce((sum, moment, k) => sum + r[3 * row + k] * moment * r[3 * column + k], 0)
  return {
    mass: body.mass,
    centerOfMass: compose(frame, { position: body.centerOfMass, rotation: IDENTITY }).position,
    inertia: [entry(0, 0), entry(0, 1), entry(0, 2), entry(1, 1), entry(1, 2), entry(2, 2)],
  }
}

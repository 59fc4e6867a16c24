// Outside source: the three-link example of Lynch & Park, Modern Robotics (2017), chapter 8, function InverseDynamics of its
// accompanying code: home frames, spatial inertias and screw axes from memory, the expected torques as published there.
import { describe, expect, it } from 'vitest'
import { IDENTITY, createChain, inverseDynamics, transpose } from '../../shared/dynamics/rigid-body/index.ts'
import type { ChainDescription, Matrix3, Vector3 } from '../../shared/dynamics/rigid-body/index.ts'

// The torques are published with eight decimals.
const TOLERANCE = 5.1e-9
const published = [74.69616155, -33.06766016, -3.23057314]

// Frames of the links at home, in the base frame: each M(i, i+1) of the example multiplied out.
const turned: Matrix3 = [0, 0, 1, 0, 1, 0, -1, 0, 0]
const home: { position: Vector3; rotation: Matrix3 }[] = [
  { position: [0, 0, 0.089159], rotation: IDENTITY },
  { position: [0.28, 0.13585, 0.089159], rotation: turned },
  { position: [0.28 + 0.395, 0.13585 - 0.1197, 0.089159], rotation: turned },
  { position: [0.28 + 0.395 + 0.14225, 0.13585 - 0.1197, 0.089159], rotation: turned },
]
const mass = [3.7, 8.393, 2.275]
const inertia: Vector3[] = [
  [0.010267, 0.010267, 0.00666],
  [0.22689, 0.22689, 0.0151074],
  [0.0494433, 0.0494433, 0.004095],
]
const screws = [
  { angular: [1, 0, 1], linear: [0, 1, 0] },
  { angular: [0, 1, 0], linear: [-0.089, 0, 0] },
  { angular: [0, 1, 0], linear: [-0.089, 0, 0.425] },
]

describe('the three-link example of Modern Robotics', () => {
  it('gives the published torques, with a wrench of ones at the tip', () => {
    const chain = createChain(threeLinks())
    // The first screw has length √2: its joint variable is √2 times ours, and its torque ours times √2.
    const q = Float64Array.of(0.1 * Math.SQRT2, 0.1, 0.1)
    const qd = Float64Array.of(0.1 * Math.SQRT2, 0.2, 0.3)
    const qdd = Float64Array.of(2 * Math.SQRT2, 1.5, 1)
    const tau = new Float64Array(3)
    inverseDynamics(chain, q, qd, qdd, tau, new Float64Array(6).fill(1))

    const found = [tau[0] * Math.SQRT2, tau[1], tau[2]]
    found.forEach((value, k) => expect(Math.abs(value - published[k]), `joint ${k + 1}: ${value}`).toBeLessThan(TOLERANCE))
  })
})

// Our frames: parallel to the base at home, each with its origin on the screw's axis.
function threeLinks(): ChainDescription {
  const origins = screws.map(({ angular: [x, y, z], linear: [u, v, w] }): Vector3 => {
    const square = x * x + y * y + z * z
    return [(y * w - z * v) / square, (z * u - x * w) / square, (x * v - y * u) / square]
  })
  return {
    joints: screws.map(({ angular }, i) => ({
      name: `joint_${i + 1}`,
      kind: 'revolute',
      axis: angular as unknown as Vector3,
      offset: { position: i === 0 ? origins[0] : subtract(origins[i], origins[i - 1]), rotation: IDENTITY },
      inertial: {
        mass: mass[i],
        centerOfMass: subtract(home[i].position, origins[i]),
        inertia: turn(home[i].rotation, inertia[i]),
      },
    })),
    gravity: [0, 0, -9.8],
    flange: { position: subtract(home[3].position, origins[2]), rotation: home[3].rotation },
  }
}

function turn(rotation: Matrix3, diagonal: Vector3): [number, number, number, number, number, number] {
  const columns = transpose(rotation)
  const entry = (r: number, c: number): number =>
    diagonal.reduce((sum, moment, k) => sum + columns[3 * k + r] * moment * columns[3 * k + c], 0)
  return [entry(0, 0), entry(0, 1), entry(0, 2), entry(1, 1), entry(1, 2), entry(2, 2)]
}

function subtract([a, b, c]: Vector3, [x, y, z]: Vector3): Vector3 {
  return [a - x, b - y, c - z]
}

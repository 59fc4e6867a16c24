// Outside source: the planar two-link arm in closed form (Spong & Vidyasagar, Robot Dynamics and Control, 2nd ed.), with unit
// masses and lengths, centres of mass at mid-link and no link inertia.
import { describe, expect, it } from 'vitest'
import { createRandom } from '../../shared/dynamics/random.ts'
import { IDENTITY, createChain, inverseDynamicsTerms, massMatrix } from '../../shared/dynamics/rigid-body/index.ts'
import type { ChainDescription } from '../../shared/dynamics/rigid-body/index.ts'

// A few dozen double-precision operations on numbers up to 30.
const TOLERANCE = 3e-12
const g = 9.81

describe('the planar two-link arm against its closed form', () => {
  it('has the textbook mass matrix, velocity torque and gravity torque', () => {
    const random = createRandom(3)
    const chain = createChain(twoLinks())
    for (let state = 0; state < 20; state++) {
      const [q1, q2, v1, v2, a1, a2] = Array.from({ length: 6 }, () => 3 * (2 * random.uniform() - 1))
      const terms = { inertia: new Float64Array(2), coriolis: new Float64Array(2), gravity: new Float64Array(2) }
      const matrix = new Float64Array(4)
      inverseDynamicsTerms(chain, Float64Array.of(q1, q2), Float64Array.of(v1, v2), Float64Array.of(a1, a2), terms)
      massMatrix(chain, Float64Array.of(q1, q2), matrix)

      const d11 = 1.5 + Math.cos(q2)
      const d12 = 0.25 + 0.5 * Math.cos(q2)
      const h = -0.5 * Math.sin(q2)
      close(matrix, [d11, d12, d12, 0.25])
      close(terms.inertia, [d11 * a1 + d12 * a2, d12 * a1 + 0.25 * a2])
      close(terms.coriolis, [h * (2 * v1 * v2 + v2 * v2), -h * v1 * v1])
      close(terms.gravity, [g * (1.5 * Math.cos(q1) + 0.5 * Math.cos(q1 + q2)), g * 0.5 * Math.cos(q1 + q2)])
    }
  })
})

function twoLinks(): ChainDescription {
  const inertial = { mass: 1, centerOfMass: [0.5, 0, 0], inertia: [0, 0, 0, 0, 0, 0] } as const
  return {
    joints: [
      { name: 'first', kind: 'revolute', offset: { position: [0, 0, 0], rotation: IDENTITY }, axis: [0, 0, 1], inertial },
      { name: 'second', kind: 'revolute', offset: { position: [1, 0, 0], rotation: IDENTITY }, axis: [0, 0, 1], inertial },
    ],
    gravity: [0, -g, 0],
    flange: { position: [1, 0, 0], rotation: IDENTITY },
  }
}

function close(found: Float64Array, expected: number[]): void {
  found.forEach((value, k) => expect(Math.abs(value - expected[k]), `${k}: ${value} for ${expected[k]}`).toBeLessThan(TOLERANCE))
}

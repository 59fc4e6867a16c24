import { describe, expect, it } from 'vitest'
import { createChain, inertialFaults, principalMoments } from '../../../shared/dynamics/rigid-body/index.ts'
import type { Inertial } from '../../../shared/dynamics/rigid-body/index.ts'
import { exampleChain } from './example-chain.ts'

const sound: Inertial = { mass: 2, centerOfMass: [0, 0, 0.1], inertia: [0.02, 0.001, 0, 0.018, 0, 0.008] }

describe('inertial parameters', () => {
  const cases: { given: Partial<Inertial>; rules: string[] }[] = [
    { given: {}, rules: [] },
    { given: { mass: 0 }, rules: ['positive_mass'] },
    { given: { inertia: [0.02, 0, 0, 0.018, 0, -0.001] }, rules: ['positive_definite'] },
    { given: { inertia: [0.02, 0.03, 0, 0.018, 0, 0.008] }, rules: ['positive_definite'] },
    { given: { inertia: [0.04, 0, 0, 0.018, 0, 0.008] }, rules: ['triangle_inequality'] },
    { given: { mass: NaN }, rules: ['finite'] },
    { given: { mass: -1, inertia: [0.04, 0, 0, 0.018, 0, 0.008] }, rules: ['positive_mass', 'triangle_inequality'] },
  ]
  for (const { given, rules } of cases) {
    it(`${JSON.stringify(given)} break ${rules.join(' and ') || 'no rule'}`, () => {
      expect(inertialFaults({ ...sound, ...given }).map((fault) => fault.rule)).toEqual(rules)
    })
  }

  it('a thin rod, whose largest moment equals the sum of the others, is sound', () => {
    expect(inertialFaults({ mass: 1, centerOfMass: [0, 0, 0], inertia: [0.01, 0, 0, 0.0099, 0, 0.0001] })).toEqual([])
  })

  it('principal moments are those of the axes the body was turned from', () => {
    // Turned 30° about z: xx and yy mix.
    const [c, s] = [Math.cos(Math.PI / 6), Math.sin(Math.PI / 6)]
    const [a, b] = [0.05, 0.02]
    const moments = principalMoments([c * c * a + s * s * b, c * s * (a - b), 0, s * s * a + c * c * b, 0, 0.03])

    moments.forEach((value, k) => expect(Math.abs(value - [0.02, 0.03, 0.05][k])).toBeLessThan(1e-15))
  })
})

describe('a chain', () => {
  it('names the joint and the rule when it cannot be built', () => {
    const description = exampleChain()
    const second = description.joints[1]

    const withSecond =
      (change: object): (() => unknown) =>
      () =>
        createChain({
          ...description,
          joints: description.joints.map((joint, i) => (i === 1 ? { ...second, ...change } : joint)),
        })
    expect(withSecond({ axis: [0, 0, 0] })).toThrow(/joint "joint_2": axis has length zero/)
    expect(withSecond({ offset: { position: [0, 0, 0], rotation: [1, 0, 0, 0, 2, 0, 0, 0, 1] } })).toThrow(
      /joint "joint_2": offset: rotation is not orthonormal/,
    )
    expect(() => createChain({ ...description, joints: [] })).toThrow(/at least one is needed/)
  })
})

import { describe, expect, it } from 'vitest'
import { attachPayload, createChain, gravityTorque, inertialFaults } from '../../../shared/dynamics/rigid-body/index.ts'
import { alder7 } from '../../../shared/simulation/alder-7.ts'

describe('Alder-7', () => {
  it('consists of bodies that can exist, as published and as built', () => {
    for (const chain of [alder7.nominal, alder7.truth.chain]) {
      for (const joint of chain.joints) expect(inertialFaults(joint.inertial), joint.name).toEqual([])
    }
  })

  it('differs as built from what is published, by several per cent', () => {
    alder7.nominal.joints.forEach((joint, j) => {
      const ratio = alder7.truth.chain.joints[j].inertial.mass / joint.inertial.mass
      expect(Math.abs(ratio - 1)).toBeLessThanOrEqual(0.07)
      expect(ratio).not.toBe(1)
    })
  })

  it('holds its largest payload stretched out, with a fifth of every torque limit to spare', () => {
    const chain = createChain(alder7.truth.chain)
    const tau = new Float64Array(7)
    attachPayload(chain, { mass: 3, centerOfMass: [0.05, 0.05, 0.12] })
    gravityTorque(chain, Float64Array.of(0, Math.PI / 2, 0, 0, 0, 0, 0), tau)

    expect(Math.abs(tau[1])).toBeGreaterThan(50)
    tau.forEach((value, j) => expect(Math.abs(value)).toBeLessThan(0.8 * alder7.limits[j].torque))
  })

  it('moves in a workspace inside its joint limits', () => {
    const { middle, halfWidth } = alder7.workspace
    middle.forEach((center, j) => {
      expect(center - halfWidth[j]).toBeGreaterThan(alder7.limits[j].lower)
      expect(center + halfWidth[j]).toBeLessThan(alder7.limits[j].upper)
    })
  })
})

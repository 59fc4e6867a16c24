import { describe, expect, test } from 'vitest'
import { createRigidBodyEvaluator, errorsPerJoint, identifyBase } from '../../../shared/dynamics/identification/index.ts'
import type { Identification, IdentifiedBase } from '../../../shared/dynamics/identification/index.ts'
import type { Motion } from '../../../shared/dynamics/motion.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { inertialFaults } from '../../../shared/dynamics/rigid-body/index.ts'
import type { ChainDescription } from '../../../shared/dynamics/rigid-body/index.ts'
import { exampleChain } from '../rigid-body/example-chain.ts'

const joints = 6
const noise = 0.05

/** An arm of all joint kinds as it is, with friction and sensor offsets. */
const truth: IdentifiedBase = {
  chain: exampleChain(),
  offsets: [0.3, -0.2, 0, 0.1, 0.5, -0.4],
  friction: Array.from({ length: joints }, (_, j) => ({
    viscous: 0.5 + 0.1 * j, coulomb: 1 + 0.2 * j, stribeck: j === 3 ? 0 : 0.5, stribeckVelocity: 0.15, smoothing: 0.03,
  })),
}

/** The arm as its maker describes it: masses and moments off by a share. */
function described(share: number): ChainDescription {
  const random = createRandom(7)
  const off = () => 1 + share * (2 * random.uniform() - 1)
  return {
    ...truth.chain,
    joints: truth.chain.joints.map(joint => {
      const factor = off()
      return {
        ...joint,
        inertial: {
          mass: joint.inertial.mass * off(),
          centerOfMass: joint.inertial.centerOfMass.map(value => value * off()) as [number, number, number],
          inertia: joint.inertial.inertia.map(value => value * factor) as [number, number, number, number, number, number],
        },
      }
    }),
  }
}

/** States drawn at random, with the torques of the arm as it is and sensor noise. */
function motionOf(rows: number, seed: number): Motion {
  const random = createRandom(seed)
  const states = Float64Array.from({ length: rows * 3 * joints }, (_, k) => {
    const part = Math.floor((k % (3 * joints)) / joints)
    return part === 0 ? 2 * random.normal() : part === 1 ? random.normal() ** 3 : 3 * random.normal()
  })
  const torque = new Float64Array(rows * joints)
  createRigidBodyEvaluator(truth).evaluate(states, rows, torque)
  for (let k = 0; k < torque.length; k++) torque[k] += noise * random.normal()
  return { name: `motion ${seed}`, rows, time: Float64Array.from({ length: rows }, (_, row) => row / 50), states, torque }
}

function run(chain: ChainDescription, motions: Motion[]): Identification {
  const steps = identifyBase(chain, motions)
  let step = steps.next()
  while (!step.done) step = steps.next()
  return step.value
}

describe('an identified base', () => {
  const motions = [motionOf(1500, 1)]
  const unseen = [motionOf(500, 2)]

  for (const share of [0.08, 0.3]) {
    test(`explains motions it has not seen down to the noise, from a description ${100 * share} % wrong`, () => {
      const { base, beforePerJoint } = run(described(share), motions)

      const errors = errorsPerJoint(base, unseen)

      // 1500 rows for 84 parameters: their own error adds about 84 / (2 · 6 · 1500) = 0.5 %; 5 % leaves room for chance.
      errors.forEach((error, j) => {
        expect(error).toBeLessThan(1.05 * noise)
        expect(beforePerJoint[j]).toBeGreaterThan(10 * noise)
      })
    })
  }

  test('finds the friction of every joint within four standard deviations', () => {
    const { parameters, base } = run(described(0.08), motions)

    truth.friction.forEach((friction, j) => {
      const name = truth.chain.joints[j].name
      for (const part of ['viscous', 'coulomb'] as const) {
        const { value, standardDeviation, identifiable } = parameters.find(entry => entry.joint === name && entry.name === part)!
        // The speeds were searched for, which the linear solution's standard deviation does not know: 0.02 N·m for that.
        expect(Math.abs(value - friction[part])).toBeLessThan(4 * standardDeviation + 0.02)
        expect(identifiable).toBe(true)
      }
      expect(base.friction[j].stribeck).toBeGreaterThanOrEqual(0)
    })
  })

  test('has only links that can exist, even where noise asks for others', () => {
    const thin = described(0.3)
    const few = [motionOf(60, 3)]

    const { base, consistent } = run({
      ...thin,
      joints: thin.joints.map(joint => ({
        ...joint, inertial: { ...joint.inertial, inertia: [1e-4, 0, 0, 1e-4, 0, 1.9e-4] as const },
      })),
    }, few)

    for (const { inertial } of base.chain.joints) expect(inertialFaults(inertial)).toEqual([])
    expect(consistent).toBe(true)
  })

  test('does without inertial parameters in the description', () => {
    const bare = {
      ...truth.chain,
      joints: truth.chain.joints.map(joint => ({
        ...joint, inertial: { mass: 0, centerOfMass: [0, 0, 0] as const, inertia: [0, 0, 0, 0, 0, 0] as const },
      })),
    }

    const { base, consistent } = run(bare, motions)

    expect(consistent).toBe(true)
    // As from a description 30 % wrong, with room for what a prior so wide lets noise do.
    errorsPerJoint(base, unseen).forEach(error => expect(error).toBeLessThan(1.1 * noise))
  })

  test('says that a still arm identifies no inertia', () => {
    const still = motionOf(300, 4)
    still.states.forEach((_, k) => { if (k % (3 * joints) >= joints) still.states[k] = 0 })
    createRigidBodyEvaluator(truth).evaluate(still.states, still.rows, still.torque)

    const { parameters, rank } = run(described(0.08), [still])

    expect(parameters.filter(({ name, identifiable }) => name.startsWith('inertia') && identifiable)).toEqual([])
    expect(parameters.filter(({ name, identifiable }) => name === 'viscous' && identifiable)).toEqual([])
    expect(rank).toBeLessThan(30)
  })

  test('comes out the same to the bit twice', () => {
    expect(JSON.stringify(run(described(0.08), motions))).toBe(JSON.stringify(run(described(0.08), motions)))
  })

  test('refuses to be identified from nothing', () => {
    expect(() => run(described(0.08), [])).toThrow(/at least one motion/)
  })
})

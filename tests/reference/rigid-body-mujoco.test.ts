// Outside source: MuJoCo (Apache-2.0, npm mujoco-js), an independent implementation of rigid-body dynamics. Its mj_inverse is
// asked for the same chain, written as MJCF, and its mass matrix for the same position.
import loadMujoco from 'mujoco-js'
import type { MainModule } from 'mujoco-js'
import { beforeAll, describe, expect, it } from 'vitest'
import { createRandom } from '../../shared/dynamics/random.ts'
import type { Random } from '../../shared/dynamics/random.ts'
import {
  attachPayload,
  createChain,
  detachPayload,
  inverseDynamics,
  massMatrix,
  rotationFromRollPitchYaw,
} from '../../shared/dynamics/rigid-body/index.ts'
import type {
  ChainDescription,
  ChainJoint,
  Inertial,
  JointKind,
  Matrix3,
  Vector3,
} from '../../shared/dynamics/rigid-body/index.ts'
import { alder7 } from '../../shared/simulation/alder-7.ts'

// Both sides work in doubles over a few hundred operations; MuJoCo stores orientations as quaternions.
// A wrong formula errs by parts in ten or hundred.
const RELATIVE_TOLERANCE = 1e-12

// Where MuJoCo diagonalises the inertias itself (see below).
const GIVEN_BY_ENTRIES = 1e-9

let mujoco: MainModule & { FS: { writeFile(path: string, content: string): void } }

beforeAll(async () => {
  mujoco = (await loadMujoco()) as unknown as typeof mujoco
})

describe('inverse dynamics against MuJoCo', () => {
  for (let seed = 1; seed <= 24; seed++) {
    it(`agrees on random chain ${seed}, with revolute, continuous and sliding joints and off-axis inertias`, () => {
      const random = createRandom(seed)
      const arm = randomChain(random, 1 + (seed % 8))
      const chain = createChain(arm.description)
      const reference = openArm(arm)

      for (let state = 0; state < 5; state++) {
        const [q, qd, qdd] = [vector(random, chain.size, 2), vector(random, chain.size, 2), vector(random, chain.size, 4)]
        const tau = new Float64Array(chain.size)
        inverseDynamics(chain, q, qd, qdd, tau)

        expect(distance(tau, reference.inverse(q, qd, qdd))).toBeLessThan(RELATIVE_TOLERANCE)
      }
      reference.close()
    })
  }

  it('agrees on the mass matrix of random chains', () => {
    for (let seed = 101; seed <= 108; seed++) {
      const random = createRandom(seed)
      const arm = randomChain(random, 7)
      const chain = createChain(arm.description)
      const reference = openArm(arm)
      const q = vector(random, 7, 2)
      const matrix = new Float64Array(49)
      massMatrix(chain, q, matrix)

      expect(distance(matrix, reference.massMatrix(q))).toBeLessThan(RELATIVE_TOLERANCE)
      reference.close()
    }
  })

  it('agrees on Alder-7, the arm of the demo, as published and as built', () => {
    for (const description of [alder7.nominal, alder7.truth.chain]) {
      const random = createRandom(9)
      const chain = createChain(description)
      const reference = openArm({ description, bodies: description.joints.map((joint) => joint.inertial) })
      for (let state = 0; state < 10; state++) {
        const [q, qd, qdd] = [vector(random, 7, 2), vector(random, 7, 2), vector(random, 7, 5)]
        const tau = new Float64Array(7)
        inverseDynamics(chain, q, qd, qdd, tau)

        expect(distance(tau, reference.inverse(q, qd, qdd))).toBeLessThan(GIVEN_BY_ENTRIES)
      }
      reference.close()
    }
  })

  it('agrees with a payload at a turned flange, given there as one more body', () => {
    const random = createRandom(7)
    const arm = randomChain(random, 6)
    const payload = randomBody(random)
    const chain = createChain(arm.description)
    const reference = openArm(arm, payload)
    const [q, qd, qdd] = [vector(random, 6, 2), vector(random, 6, 2), vector(random, 6, 4)]
    const tau = new Float64Array(6)
    attachPayload(chain, toInertial(payload))
    inverseDynamics(chain, q, qd, qdd, tau)

    expect(distance(tau, reference.inverse(q, qd, qdd))).toBeLessThan(RELATIVE_TOLERANCE)
    detachPayload(chain)
    inverseDynamics(chain, q, qd, qdd, tau)
    expect(distance(tau, reference.inverse(q, qd, qdd))).toBeGreaterThan(1e-3)
    reference.close()
  })
})

/** A body by its principal moments (kg·m²) and axes (columns, in the link's frame). */
interface Body {
  mass: number
  centerOfMass: Vector3
  moments: Vector3
  axes: Matrix3
}

/** The same chain twice: as ours, and with its bodies as MuJoCo takes them. */
interface RandomChain {
  description: ChainDescription
  bodies: (Body | Inertial)[]
}

interface ReferenceArm {
  inverse(q: Float64Array, qd: Float64Array, qdd: Float64Array): Float64Array
  massMatrix(q: Float64Array): Float64Array
  close(): void
}

function openArm({ description, bodies }: RandomChain, payload?: Body): ReferenceArm {
  mujoco.FS.writeFile('/arm.xml', mjcf(description, bodies, payload))
  const model = mujoco.MjModel.loadFromXML('/arm.xml')
  if (model === null || model === undefined) throw new Error('MuJoCo does not accept the chain')
  const data = new mujoco.MjData(model)
  const size = description.joints.length
  const set = (q: Float64Array, qd: Float64Array, qdd: Float64Array): void => {
    data.qpos.set(q)
    data.qvel.set(qd)
    data.qacc.set(qdd)
    mujoco.mj_inverse(model, data)
  }
  return {
    inverse(q, qd, qdd) {
      set(q, qd, qdd)
      return Float64Array.from(data.qfrc_inverse as ArrayLike<number>)
    },
    massMatrix(q) {
      const zeros = new Float64Array(size)
      set(q, zeros, zeros)
      const rest = Float64Array.from(data.qfrc_inverse as ArrayLike<number>)
      const out = new Float64Array(size * size)
      for (let j = 0; j < size; j++) {
        const unit = new Float64Array(size)
        unit[j] = 1
        set(q, zeros, unit)
        for (let i = 0; i < size; i++) out[size * i + j] = (data.qfrc_inverse as ArrayLike<number>)[i] - rest[i]
      }
      return out
    },
    close() {
      data.delete()
      model.delete()
    },
  }
}

function mjcf(description: ChainDescription, bodies: (Body | Inertial)[], payload?: Body): string {
  const tail = payload === undefined ? '' : `<body ${placement(description.flange)}>${inertial(payload)}</body>`
  const arm = description.joints.reduceRight(
    (inner, joint, i) => `<body ${placement(joint.offset)}>
    <joint type="${joint.kind === 'prismatic' ? 'slide' : 'hinge'}" pos="0 0 0" axis="${joint.axis.join(' ')}"/>
    ${inertial(bodies[i])}${inner}</body>`,
    tail,
  )
  const settings = `<compiler angle="radian"/><option gravity="${description.gravity.join(' ')}"/>`
  return `<mujoco>${settings}<worldbody>${arm}</worldbody></mujoco>`
}

// Principal moments and axes where known: the six entries MuJoCo diagonalises itself, to a few parts in 1e9 only.
function inertial(body: Body | Inertial): string {
  if ('inertia' in body) {
    const [xx, xy, xz, yy, yz, zz] = body.inertia
    const entries = [xx, yy, zz, xy, xz, yz].join(' ')
    return `<inertial mass="${body.mass}" pos="${body.centerOfMass.join(' ')}" fullinertia="${entries}"/>`
  }
  const { mass, centerOfMass, moments, axes } = body
  return `<inertial mass="${mass}" diaginertia="${moments.join(' ')}" ${placement({ position: centerOfMass, rotation: axes })}/>`
}

function placement({ position, rotation }: ChainDescription['flange']): string {
  return `pos="${position.join(' ')}" xyaxes="${[0, 3, 6, 1, 4, 7].map((k) => rotation[k]).join(' ')}"`
}

function randomChain(random: Random, size: number): RandomChain {
  const kinds: JointKind[] = ['revolute', 'continuous', 'prismatic']
  const bodies = Array.from({ length: size }, () => randomBody(random))
  const joints = bodies.map((body, i): ChainJoint => ({
    name: `joint_${i + 1}`,
    kind: kinds[random.integer(3)],
    offset: { position: triple(random, 0.4), rotation: randomRotation(random) },
    axis: unit(triple(random, 1)),
    inertial: toInertial(body),
  }))
  const flange = { position: triple(random, 0.1), rotation: randomRotation(random) }
  return { description: { joints, gravity: triple(random, 9.81), flange }, bodies }
}

// Any three squared radii of gyration make a body that can exist; its principal axes point in no special direction.
function randomBody(random: Random): Body {
  const mass = 0.5 + 4 * random.uniform()
  const [a, b, c] = triple(random, 0.2).map((radius) => mass * radius * radius)
  return { mass, centerOfMass: triple(random, 0.2), moments: [b + c, a + c, a + b], axes: randomRotation(random) }
}

function toInertial({ mass, centerOfMass, moments, axes: r }: Body): Inertial {
  const entry = (row: number, column: number): number =>
    moments.reduce((sum, moment, k) => sum + r[3 * row + k] * moment * r[3 * column + k], 0)
  return { mass, centerOfMass, inertia: [entry(0, 0), entry(0, 1), entry(0, 2), entry(1, 1), entry(1, 2), entry(2, 2)] }
}

function randomRotation(random: Random): Matrix3 {
  const [roll, pitch, yaw] = triple(random, Math.PI)
  return rotationFromRollPitchYaw(roll, pitch, yaw)
}

function triple(random: Random, size: number): Vector3 {
  return [size * (2 * random.uniform() - 1), size * (2 * random.uniform() - 1), size * (2 * random.uniform() - 1)]
}

function unit([x, y, z]: Vector3): Vector3 {
  const length = Math.hypot(x, y, z)
  return [x / length, y / length, z / length]
}

function vector(random: Random, size: number, scale: number): Float64Array {
  return Float64Array.from({ length: size }, () => scale * (2 * random.uniform() - 1))
}

function distance(found: Float64Array, expected: Float64Array): number {
  const largest = expected.reduce((sum, value) => Math.max(sum, Math.abs(value)), 0)
  return found.reduce((sum, value, k) => Math.max(sum, Math.abs(value - expected[k])), 0) / largest
}

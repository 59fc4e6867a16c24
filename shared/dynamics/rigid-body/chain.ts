import { checkLength } from '../shape-error.ts'

/** Three numbers: x, y, z. */
export type Vector3 = readonly [number, number, number]

/** A 3 × 3 matrix, row-major. As a rotation it takes coordinates of the inner frame to the outer one. */
export type Matrix3 = readonly [number, number, number, number, number, number, number, number, number]

/** Where a frame sits in another: its origin (m) and its rotation, which takes inner coordinates to outer ones. */
export interface Placement {
  readonly position: Vector3
  readonly rotation: Matrix3
}

/** Mass (kg), centre of mass (m) and inertia about the centre of mass (kg·m²; xx, xy, xz, yy, yz, zz), in the link's frame. */
export interface Inertial {
  readonly mass: number
  readonly centerOfMass: Vector3
  readonly inertia: readonly [number, number, number, number, number, number]
}

/** How a joint moves its link: about its axis, within limits or without, or along it. */
export type JointKind = 'revolute' | 'continuous' | 'prismatic'

/** A joint and the link that it moves. At position zero the link's frame is the joint's frame. */
export interface ChainJoint {
  readonly name: string
  readonly kind: JointKind
  /** The joint's frame in the frame of the link before it (the first: in the base frame). */
  readonly offset: Placement
  /** Unit vector in the joint's frame: positive motion turns about it, or slides along it. */
  readonly axis: Vector3
  /** Of the link after the joint. */
  readonly inertial: Inertial
}

/** An unbranched arm on a fixed base. */
export interface ChainDescription {
  readonly joints: readonly ChainJoint[]
  /** Acceleration of free fall in the base frame, m/s²: (0, 0, −9.81) for an arm that stands on the floor. */
  readonly gravity: Vector3
  /** The flange frame in the last link's frame: payloads are given in it. */
  readonly flange: Placement
}

/** No rotation. */
export const IDENTITY: Matrix3 = [1, 0, 0, 0, 1, 0, 0, 0, 1]

/** Parameters of a link that torque is linear in: m, m·c (3), inertia about the link's origin (xx, xy, xz, yy, yz, zz). */
export const PARAMETERS_PER_LINK = 10

/**
 * A chain made ready for evaluation: constants, the payload that is attached, and work arrays, so that an evaluation
 * allocates nothing. Not to be shared between two evaluations that run at the same time.
 */
export interface Chain {
  readonly description: ChainDescription
  /** Number of joints, n. */
  readonly size: number
  /** n: 1 where the joint slides, else 0. */
  readonly slides: Uint8Array
  /** n × 3 unit axes in the joints' frames. */
  readonly axis: Float64Array
  /** n × 3 origins of the joints' frames in the frames of the links before them. */
  readonly origin: Float64Array
  /** n × 27: matrices A, B, C of rotation = A + cos q · B + sin q · C. */
  readonly turn: Float64Array
  /** n × 3: the axis in the frame of the link before, along which a sliding joint moves. */
  readonly slide: Float64Array
  /** n × 10 parameters of the links alone, see {@link PARAMETERS_PER_LINK}. */
  readonly linkParameters: Float64Array
  /** n × 10 parameters that evaluations use: the links', with the payload added to the last. */
  readonly parameters: Float64Array
  readonly gravity: Float64Array
  readonly flangeOrigin: Float64Array
  readonly flangeRotation: Float64Array
  /** What evaluations scribble on. Its content between two calls means nothing. */
  readonly work: ChainWork
}

/** Work arrays of a chain. Vectors are in their links' frames; row i + 1 belongs to link i, row 0 to the base. */
export interface ChainWork {
  readonly trig: Float64Array
  /** n × 9, from link to the link before. */
  readonly rotation: Float64Array
  /** n × 3, origin of the link in the link before. */
  readonly offset: Float64Array
  readonly angularVelocity: Float64Array
  readonly angularAcceleration: Float64Array
  readonly acceleration: Float64Array
  readonly force: Float64Array
  readonly moment: Float64Array
  readonly wrench: Float64Array
  /** n zeros, read only. */
  readonly zeros: Float64Array
  /** Three zeros, read only: no gravity. */
  readonly weightless: Float64Array
  readonly unit: Float64Array
  readonly bias: Float64Array
  readonly column: Float64Array
  readonly matrix: Float64Array
}

/**
 * Makes a chain ready for evaluation.
 *
 * @param description  n ≥ 1 joints; axes are normalised here
 * @throws {RangeError} no joint, an axis that is zero, a rotation that is not orthonormal, a negative mass, a number not finite
 */
export function createChain(description: ChainDescription): Chain {
  const size = description.joints.length
  if (size === 0) throw new RangeError('joints: the chain has none, at least one is needed')
  requireVector('gravity', description.gravity)
  requirePlacement('flange', description.flange)
  const chain: Chain = {
    description,
    size,
    slides: new Uint8Array(size),
    axis: new Float64Array(3 * size),
    origin: new Float64Array(3 * size),
    turn: new Float64Array(27 * size),
    slide: new Float64Array(3 * size),
    linkParameters: new Float64Array(PARAMETERS_PER_LINK * size),
    parameters: new Float64Array(PARAMETERS_PER_LINK * size),
    gravity: Float64Array.from(description.gravity),
    flangeOrigin: Float64Array.from(description.flange.position),
    flangeRotation: Float64Array.from(description.flange.rotation),
    work: createWork(size),
  }
  description.joints.forEach((joint, i) => {
    const name = `joint "${joint.name}"`
    requirePlacement(`${name}: offset`, joint.offset)
    const axis = unitAxis(name, joint.axis)
    chain.slides[i] = joint.kind === 'prismatic' ? 1 : 0
    chain.axis.set(axis, 3 * i)
    chain.origin.set(joint.offset.position, 3 * i)
    chain.turn.set(turnMatrices(joint.offset.rotation, axis), 27 * i)
    const r = joint.offset.rotation
    for (let k = 0; k < 3; k++) chain.slide[3 * i + k] = r[3 * k] * axis[0] + r[3 * k + 1] * axis[1] + r[3 * k + 2] * axis[2]
    chain.linkParameters.set(inertialParameters(joint.inertial, name), PARAMETERS_PER_LINK * i)
  })
  chain.parameters.set(chain.linkParameters)
  return chain
}

/**
 * The ten parameters of a link that torque is linear in.
 *
 * @param inertial  mass ≥ 0, centre of mass and inertia about it
 * @param name      whose they are, for the message
 * @returns m, m·c (3), inertia about the link's origin (xx, xy, xz, yy, yz, zz)
 * @throws {RangeError} a number is not finite or the mass is negative
 * Source: parallel axes (Huygens–Steiner).
 */
export function inertialParameters(inertial: Inertial, name = 'inertial'): Float64Array {
  const { mass, centerOfMass, inertia } = inertial
  requireVector(`${name}: centre of mass`, centerOfMass)
  checkLength(`${name}: inertia`, inertia.length, 6, 'xx, xy, xz, yy, yz, zz')
  if (!(mass >= 0) || !Number.isFinite(mass)) throw new RangeError(`${name}: mass is ${mass}, expected a number ≥ 0`)
  if (!inertia.every(Number.isFinite))
    throw new RangeError(`${name}: inertia has a value that is not a finite number: ${inertia.join(', ')}`)
  const [x, y, z] = centerOfMass
  return Float64Array.of(
    mass,
    mass * x,
    mass * y,
    mass * z,
    inertia[0] + mass * (y * y + z * z),
    inertia[1] - mass * x * y,
    inertia[2] - mass * x * z,
    inertia[3] + mass * (x * x + z * z),
    inertia[4] - mass * y * z,
    inertia[5] + mass * (x * x + y * y),
  )
}

/**
 * The inverse of {@link inertialParameters}.
 *
 * @param parameters  at least `at + 10` long
 * @param at          where the link's ten parameters start
 * @throws {RangeError} the mass is not positive: its centre is not defined then
 */
export function inertialFromParameters(parameters: Float64Array, at = 0): Inertial {
  const mass = parameters[at]
  if (!(mass > 0)) throw new RangeError(`parameters: mass at ${at} is ${mass}, a centre of mass needs a positive one`)
  const x = parameters[at + 1] / mass
  const y = parameters[at + 2] / mass
  const z = parameters[at + 3] / mass
  return {
    mass,
    centerOfMass: [x, y, z],
    inertia: [
      parameters[at + 4] - mass * (y * y + z * z),
      parameters[at + 5] + mass * x * y,
      parameters[at + 6] + mass * x * z,
      parameters[at + 7] - mass * (x * x + z * z),
      parameters[at + 8] + mass * y * z,
      parameters[at + 9] - mass * (x * x + y * y),
    ],
  }
}

function createWork(size: number): ChainWork {
  return {
    trig: new Float64Array(2),
    rotation: new Float64Array(9 * size),
    offset: new Float64Array(3 * size),
    angularVelocity: new Float64Array(3 * (size + 1)),
    angularAcceleration: new Float64Array(3 * (size + 1)),
    acceleration: new Float64Array(3 * (size + 1)),
    force: new Float64Array(3 * (size + 1)),
    moment: new Float64Array(3 * (size + 1)),
    wrench: new Float64Array(6),
    zeros: new Float64Array(size),
    weightless: new Float64Array(3),
    unit: new Float64Array(size),
    bias: new Float64Array(size),
    column: new Float64Array(size),
    matrix: new Float64Array(size * size),
  }
}

// Rodrigues' formula sorted by 1, cos q and sin q, with the joint's fixed rotation multiplied in.
function turnMatrices(fixed: Matrix3, [x, y, z]: Vector3): Float64Array {
  const along = [x * x, x * y, x * z, x * y, y * y, y * z, x * z, y * z, z * z]
  const across = along.map((value, k) => (k % 4 === 0 ? 1 : 0) - value)
  const cross = [0, -z, y, z, 0, -x, -y, x, 0]
  const out = new Float64Array(27)
  ;[along, across, cross].forEach((matrix, m) => {
    for (let r = 0; r < 3; r++) {
      for (let c = 0; c < 3; c++) {
        out[9 * m + 3 * r + c] = fixed[3 * r] * matrix[c] + fixed[3 * r + 1] * matrix[3 + c] + fixed[3 * r + 2] * matrix[6 + c]
      }
    }
  })
  return out
}

function unitAxis(name: string, axis: Vector3): Vector3 {
  requireVector(`${name}: axis`, axis)
  const length = Math.sqrt(axis[0] * axis[0] + axis[1] * axis[1] + axis[2] * axis[2])
  if (length < 1e-9)
    throw new RangeError(`${name}: axis has length zero, give the direction that positive motion turns about or slides along`)
  return [axis[0] / length, axis[1] / length, axis[2] / length]
}

function requireVector(name: string, vector: Vector3): void {
  checkLength(name, vector.length, 3, 'x, y, z')
  if (!vector.every(Number.isFinite))
    throw new RangeError(`${name} has a value that is not a finite number: ${vector.join(', ')}`)
}

function requirePlacement(name: string, { position, rotation }: Placement): void {
  requireVector(`${name}: position`, position)
  checkLength(`${name}: rotation`, rotation.length, 9, '3 × 3')
  for (let r = 0; r < 3; r++) {
    for (let s = r; s < 3; s++) {
      const dot =
        rotation[3 * r] * rotation[3 * s] + rotation[3 * r + 1] * rotation[3 * s + 1] + rotation[3 * r + 2] * rotation[3 * s + 2]
      if (!(Math.abs(dot - (r === s ? 1 : 0)) < 1e-6)) {
        throw new RangeError(
          `${name}: rotation is not orthonormal: rows ${r} and ${s} have the product ${dot}, expected ${r === s ? 1 : 0}`,
        )
      }
    }
  }
}

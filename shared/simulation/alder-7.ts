import { createRandom } from '../dynamics/random.ts'
import { IDENTITY } from '../dynamics/rigid-body/index.ts'
import type { ChainDescription, ChainJoint, Inertial, Vector3 } from '../dynamics/rigid-body/index.ts'
import type { JointLimits, SimulatedArm } from './simulated-arm.ts'

interface JointRow {
  name: string
  origin: Vector3
  axis: Vector3
  mass: number
  centerOfMass: Vector3
  inertia: Inertial['inertia']
  limits: JointLimits
  friction: { viscous: number; coulomb: number; stribeck: number }
  torqueNoise: number
  stiffness: number
}

const rows: JointRow[] = [
  {
    name: 'alder_waist',
    origin: [0, 0, 0.18],
    axis: [0, 0, 1],
    mass: 3.9,
    centerOfMass: [0.004, 0.018, 0.095],
    inertia: [0.0231, 0.0004, -0.0003, 0.0217, 0.0007, 0.0094],
    limits: { lower: -2.9, upper: 2.9, velocity: 1.9, torque: 160, torqueRate: 1000 },
    friction: { viscous: 1.5, coulomb: 2.4, stribeck: 0.5 },
    torqueNoise: 1,
    stiffness: 100,
  },
  {
    name: 'alder_shoulder',
    origin: [0, 0.025, 0.17],
    axis: [0, 1, 0],
    mass: 3.4,
    centerOfMass: [-0.003, -0.021, 0.112],
    inertia: [0.0268, -0.0003, 0.0005, 0.0249, 0.0006, 0.0082],
    limits: { lower: -1.8, upper: 1.9, velocity: 1.9, torque: 160, torqueRate: 1000 },
    friction: { viscous: 1.7, coulomb: 2.6, stribeck: 0.55 },
    torqueNoise: 1.4,
    stiffness: 200,
  },
  {
    name: 'alder_upper_arm',
    origin: [0, -0.025, 0.22],
    axis: [0, 0, 1],
    mass: 2.8,
    centerOfMass: [0.002, 0.019, 0.101],
    inertia: [0.0176, 0.0002, 0.0003, 0.0168, -0.0004, 0.0061],
    limits: { lower: -2.9, upper: 2.9, velocity: 2.1, torque: 110, torqueRate: 1000 },
    friction: { viscous: 1, coulomb: 1.5, stribeck: 0.33 },
    torqueNoise: 0.8,
    stiffness: 100,
  },
  {
    name: 'alder_elbow',
    origin: [0, 0.028, 0.2],
    axis: [0, 1, 0],
    mass: 2.2,
    centerOfMass: [0.005, -0.017, 0.098],
    inertia: [0.0139, -0.0003, 0.0002, 0.0131, 0.0005, 0.0049],
    limits: { lower: -0.4, upper: 2.5, velocity: 2.1, torque: 90, torqueRate: 1000 },
    friction: { viscous: 0.9, coulomb: 1.4, stribeck: 0.3 },
    torqueNoise: 0.8,
    stiffness: 150,
  },
  {
    name: 'alder_forearm',
    origin: [0, -0.028, 0.2],
    axis: [0, 0, 1],
    mass: 1.6,
    centerOfMass: [-0.002, 0.016, 0.088],
    inertia: [0.0081, 0.0001, 0.0002, 0.0079, -0.0002, 0.003],
    limits: { lower: -2.9, upper: 2.9, velocity: 2.5, torque: 45, torqueRate: 600 },
    friction: { viscous: 0.4, coulomb: 0.6, stribeck: 0.13 },
    torqueNoise: 0.28,
    stiffness: 40,
  },
  {
    name: 'alder_wrist',
    origin: [0, 0.016, 0.18],
    axis: [0, 1, 0],
    mass: 1.2,
    centerOfMass: [0.004, -0.009, 0.031],
    inertia: [0.0031, 0.0001, 0.0001, 0.003, 0.0001, 0.0018],
    limits: { lower: -1.9, upper: 2.1, velocity: 2.5, torque: 40, torqueRate: 600 },
    friction: { viscous: 0.3, coulomb: 0.45, stribeck: 0.1 },
    torqueNoise: 0.25,
    stiffness: 60,
  },
  {
    name: 'alder_hand',
    origin: [0, -0.016, 0.09],
    axis: [0, 0, 1],
    // With the flat gripper, which stays on.
    mass: 1.2,
    centerOfMass: [0.003, 0.002, 0.058],
    inertia: [0.0024, 0, 0.00002, 0.0023, 0.00004, 0.0013],
    limits: { lower: -3, upper: 3, velocity: 3, torque: 14, torqueRate: 300 },
    friction: { viscous: 0.1, coulomb: 0.15, stribeck: 0.033 },
    torqueNoise: 0.08,
    stiffness: 10,
  },
]

const nominal: ChainDescription = {
  joints: rows.map((row): ChainJoint => ({
    name: row.name,
    kind: 'revolute',
    offset: { position: row.origin, rotation: IDENTITY },
    axis: row.axis,
    inertial: { mass: row.mass, centerOfMass: row.centerOfMass, inertia: row.inertia },
  })),
  gravity: [0, 0, -9.81],
  flange: { position: [0, 0, 0.055], rotation: IDENTITY },
}

// Which Alder-7 of all that could be built: the one that the demo's recordings come from.
const TRUTH_SEED = 7001

/**
 * Alder-7: an invented seven-joint arm of an invented pottery works, 16.3 kg, for payloads of 0.8 to 3 kg. It loads shaped
 * clay onto kiln carts. Simulated throughout.
 */
export const alder7: SimulatedArm = {
  name: 'alder-7',
  nominal,
  limits: rows.map((row) => row.limits),
  truth: {
    chain: perturb(nominal, TRUTH_SEED),
    // The Stribeck part falls over so wide a range of speeds that viscous friction outweighs it: no stick-slip.
    friction: rows.map((row) => ({ ...row.friction, stribeckVelocity: 0.3, smoothing: 0.02 })),
    positionNoise: rows.map(() => 1e-5),
    torqueNoise: rows.map((row) => row.torqueNoise),
  },
  tuning: { bandwidth: 22, stiffness: rows.map((row) => row.stiffness) },
  fallback: 'controlled_stop',
  workspace: { middle: [0, 0.1, 0, 1, 0, 0.7, 0], halfWidth: [0.9, 0.55, 0.5, 0.7, 0.6, 0.7, 0.9] },
}

/** The chain as built: masses and inertias off by up to 7 %, centres of mass by up to 6 mm; still a possible body. */
export function perturb(description: ChainDescription, seed: number): ChainDescription {
  const random = createRandom(seed)
  const within = (size: number): number => size * (2 * random.uniform() - 1)
  return {
    ...description,
    joints: description.joints.map((joint) => {
      const {
        mass,
        centerOfMass: [x, y, z],
        inertia,
      } = joint.inertial
      const massScale = 1 + within(0.07)
      // All six by one factor: principal axes stay, and so does the triangle inequality.
      const inertiaScale = massScale * (1 + within(0.07))
      return {
        ...joint,
        inertial: {
          mass: mass * massScale,
          centerOfMass: [x + within(0.006), y + within(0.006), z + within(0.006)],
          inertia: inertia.map((value) => value * inertiaScale) as unknown as Inertial['inertia'],
        },
      }
    }),
  }
}

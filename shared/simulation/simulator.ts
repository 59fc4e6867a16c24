import type { Random } from '../dynamics/random.ts'
import {
  attachPayload,
  createChain,
  detachPayload,
  forwardDynamics,
  jointFriction,
  jointFrictionSlope,
} from '../dynamics/rigid-body/index.ts'
import type { Payload } from '../dynamics/rigid-body/index.ts'
import { checkLength } from '../dynamics/shape-error.ts'
import type { ArmTruth } from './simulated-arm.ts'

/** An arm in motion. */
export interface Simulator {
  readonly joints: number
  /** s since the start. */
  readonly time: number
  /** True position and velocity, length n; read only. */
  readonly position: Float64Array
  readonly velocity: Float64Array
  /** Applies a torque for a while. @throws {ShapeError} the torque is not n long */
  step(torque: Float64Array, duration: number): void
  /** Attaches a payload at the flange, from now on. */
  grip(payload: Payload): void
  release(): void
  /** What the sensors read now: encoder positions, and the torque last applied, both with noise. */
  measure(position: Float64Array, torque: Float64Array): void
}

// Friction is steep near standstill, so it is taken implicitly and the rest explicitly; half a millisecond keeps the error
// of a step below what the sensors see.
const LONGEST_STEP = 5e-4

/**
 * Rigid-body dynamics with friction, stepped in time.
 *
 * @param truth     how the arm really is
 * @param position  where it starts, at rest, length n
 * @param random    for the noise of the sensors
 * Source: semi-implicit Euler, linearly implicit in friction (Hairer & Wanner, Solving Ordinary Differential Equations II;
 * from memory).
 */
export function createSimulator(truth: ArmTruth, position: ArrayLike<number>, random: Random): Simulator {
  const chain = createChain(truth.chain)
  const { size } = chain
  checkLength('position', position.length, size, 'one per joint')
  const q = Float64Array.from(position)
  const qd = new Float64Array(size)
  const qdd = new Float64Array(size)
  const drive = new Float64Array(size)
  const damping = new Float64Array(size)
  const applied = new Float64Array(size)
  let time = 0

  function advance(h: number): void {
    for (let i = 0; i < size; i++) {
      drive[i] = applied[i] - jointFriction(truth.friction[i], qd[i])
      // Where the Stribeck part falls with speed the slope is negative: explicit there, or the step would push.
      damping[i] = h * Math.max(0, jointFrictionSlope(truth.friction[i], qd[i]))
    }
    forwardDynamics(chain, q, qd, drive, qdd, damping)
    for (let i = 0; i < size; i++) {
      qd[i] += h * qdd[i]
      q[i] += h * qd[i]
    }
  }

  return {
    joints: size,
    position: q,
    velocity: qd,
    get time() {
      return time
    },
    step(torque, duration) {
      checkLength('torque', torque.length, size, 'one per joint')
      applied.set(torque)
      const steps = Math.max(1, Math.ceil(duration / LONGEST_STEP - 1e-9))
      for (let k = 0; k < steps; k++) advance(duration / steps)
      time += duration
    },
    grip: (payload) => attachPayload(chain, payload),
    release: () => detachPayload(chain),
    measure(readPosition, readTorque) {
      for (let i = 0; i < size; i++) {
        readPosition[i] = q[i] + truth.positionNoise[i] * random.normal()
        readTorque[i] = applied[i] + truth.torqueNoise[i] * random.normal()
      }
    },
  }
}

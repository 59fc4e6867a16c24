import { createChain, massMatrix } from '../dynamics/rigid-body/index.ts'
import type { JointState } from './motion.ts'
import type { SimulatedArm } from './simulated-arm.ts'

/** A computed-torque controller: feed-forward plus feedback towards the desired state. */
export interface Controller {
  /** Feedback torque of the last cycle, length n. */
  readonly feedback: Float64Array
  /** Velocity as the controller estimates it from encoder positions, length n. */
  readonly velocity: Float64Array
  /** Cycles in which a torque or torque-rate limit was met, per joint. */
  readonly limited: Uint32Array
  /**
   * One control cycle.
   *
   * @param desired      desired state
   * @param position     measured, length n
   * @param feedForward  torque to start from, length n; with a value that is not finite the whole vector is dropped
   * @param torque       out: what to command, within the limits
   */
  cycle(desired: JointState, position: Float64Array, feedForward: Float64Array, torque: Float64Array): void
}

// s, of the low-pass on differentiated encoder positions.
const VELOCITY_TIME_CONSTANT = 0.004

/**
 * torque = feed-forward + M(q) (ω² e + 2 ω ė) + k e, saturated at the torque limits, then limited in rate: in this order a
 * rate limit never leaves the arm above its torque limit. M is that of the published description; with it every direction of
 * motion is damped alike, however small its inertia, and the extra spring k holds light joints against their friction.
 *
 * @param arm    whose description, limits and tuning hold
 * @param cycle  s
 * Source: Lynch & Park, Modern Robotics (2017), section 11.4 (from memory).
 */
export function createController({ nominal, limits, tuning }: SimulatedArm, cycle: number): Controller {
  const n = limits.length
  const chain = createChain(nominal)
  const inertia = new Float64Array(n * n)
  const correction = new Float64Array(n)
  const feedback = new Float64Array(n)
  const velocity = new Float64Array(n)
  const last = new Float64Array(n)
  const lastPosition = new Float64Array(n)
  const limited = new Uint32Array(n)
  const smoothing = cycle / (cycle + VELOCITY_TIME_CONSTANT)
  let hasStarted = false

  function feedBack(desired: JointState, position: Float64Array): void {
    const { bandwidth, stiffness } = tuning
    for (let j = 0; j < n; j++) {
      velocity[j] += smoothing * ((position[j] - lastPosition[j]) / cycle - velocity[j])
      lastPosition[j] = position[j]
      correction[j] =
        bandwidth * bandwidth * (desired.position[j] - position[j]) + 2 * bandwidth * (desired.velocity[j] - velocity[j])
    }
    massMatrix(chain, position, inertia)
    for (let i = 0; i < n; i++) {
      let sum = stiffness[i] * (desired.position[i] - position[i])
      for (let j = 0; j < n; j++) sum += inertia[n * i + j] * correction[j]
      feedback[i] = sum
    }
  }

  return {
    feedback,
    velocity,
    limited,
    cycle(desired, position, feedForward, torque) {
      if (!hasStarted) lastPosition.set(position)
      feedBack(desired, position)
      const isUsable = isFinite(feedForward)
      for (let j = 0; j < n; j++) {
        const { torque: most, torqueRate } = limits[j]
        const wanted = (isUsable ? feedForward[j] : 0) + feedback[j]
        const saturated = Math.max(-most, Math.min(most, wanted))
        const step = torqueRate * cycle
        // The arm is held by its brakes before the first cycle: it may start at any torque.
        torque[j] = hasStarted ? Math.max(last[j] - step, Math.min(last[j] + step, saturated)) : saturated
        if (torque[j] !== wanted) limited[j]++
        last[j] = torque[j]
      }
      hasStarted = true
    },
  }
}

function isFinite(values: Float64Array): boolean {
  for (let j = 0; j < values.length; j++) if (!Number.isFinite(values[j])) return false
  return true
}

import { checkLength, ShapeError } from '../shape-error.ts'
import { createChain, frictionTorque, inverseDynamics } from '../rigid-body/index.ts'
import type { Chain, ChainDescription, JointFriction } from '../rigid-body/index.ts'

/** A rigid-body base: what a version stands on instead of, or below, a network. Reads as text. */
export interface IdentifiedBase {
  /** With identified inertial parameters; its gravity and flange are the arm's. */
  readonly chain: ChainDescription
  /** Torque sensor offset per joint, N·m (sliding: N), length n. */
  readonly offsets: readonly number[]
  readonly friction: readonly JointFriction[]
}

/** Evaluates a rigid-body base. Not to be shared between two evaluations that run at the same time. */
export interface RigidBodyEvaluator {
  readonly joints: number
  readonly chain: Chain
  /**
   * Torque of rows, N·m (sliding: N). Allocates nothing.
   *
   * @param states  rows × 3n: [position, velocity, acceleration], SI units; from row `first` on
   * @param torque  out, rows × n, overwritten
   * @param friction  out, optional, rows × n: the friction part of it
   */
  evaluate(states: Float64Array, rows: number, torque: Float64Array, friction?: Float64Array): void
}

/**
 * Makes a base ready for evaluation. Bit-deterministic: + − × ÷ and our own elementary functions alone.
 *
 * @throws {ShapeError} offsets or friction do not fit the chain
 * @throws {RangeError} the chain cannot be used, see createChain
 */
export function createRigidBodyEvaluator({ chain: description, offsets, friction }: IdentifiedBase): RigidBodyEvaluator {
  const chain = createChain(description)
  const joints = chain.size
  checkLength('offsets', offsets.length, joints, `${joints} joints`)
  checkLength('friction', friction.length, joints, `${joints} joints`)
  for (const [j, value] of offsets.entries()) {
    if (!Number.isFinite(value)) throw new ShapeError(`offsets: value ${j} is ${value}.`)
  }
  for (const [j, { smoothing, stribeckVelocity }] of friction.entries()) {
    if (!(smoothing > 0 && stribeckVelocity > 0)) throw new ShapeError(`friction: joint ${j} has a speed that is not above 0.`)
  }
  const q = new Float64Array(joints)
  const qd = new Float64Array(joints)
  const qdd = new Float64Array(joints)
  const tau = new Float64Array(joints)
  const rub = new Float64Array(joints)

  function evaluate(states: Float64Array, rows: number, torque: Float64Array, frictionPart?: Float64Array): void {
    for (let row = 0; row < rows; row++) {
      const at = 3 * joints * row
      for (let j = 0; j < joints; j++) {
        q[j] = states[at + j]
        qd[j] = states[at + joints + j]
        qdd[j] = states[at + 2 * joints + j]
      }
      inverseDynamics(chain, q, qd, qdd, tau)
      frictionTorque(friction, qd, rub)
      for (let j = 0; j < joints; j++) {
        torque[joints * row + j] = tau[j] + rub[j] + offsets[j]
        if (frictionPart) frictionPart[joints * row + j] = rub[j]
      }
    }
  }

  return { joints, chain, evaluate }
}

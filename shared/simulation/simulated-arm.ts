import type { ChainDescription, JointFriction } from '../dynamics/rigid-body/index.ts'

/** What a joint may do; rad, rad/s, N·m, N·m/s. */
export interface JointLimits {
  readonly lower: number
  readonly upper: number
  readonly velocity: number
  readonly torque: number
  readonly torqueRate: number
}

/**
 * What the controller does when predictions have stopped for long, of the fallbacks an arm can declare those that the
 * simulation knows: slow down along the path and stand, or stand at once.
 */
export type Fallback = 'controlled_stop' | 'hold_position'

/** How the arm really is, which nobody who works with it knows. n joints. */
export interface ArmTruth {
  readonly chain: ChainDescription
  readonly friction: readonly JointFriction[]
  /** Standard deviation of a reading, per joint: encoder (rad) and torque sensor (N·m). */
  readonly positionNoise: readonly number[]
  readonly torqueNoise: readonly number[]
}

/** An arm that exists in simulation only: what its maker publishes, how it really is, and how its controller is tuned. */
export interface SimulatedArm {
  readonly name: string
  /** As published: inertial parameters off by several per cent, no friction. */
  readonly nominal: ChainDescription
  readonly limits: readonly JointLimits[]
  readonly truth: ArmTruth
  /** Of the joint controller: bandwidth of its feedback (rad/s), and a spring on top of it, against friction (N·m/rad). */
  readonly tuning: { readonly bandwidth: number; readonly stiffness: readonly number[] }
  readonly fallback: Fallback
  /** Where motions are: middle and half width of the box of positions they visit, rad. */
  readonly workspace: { readonly middle: readonly number[]; readonly halfWidth: readonly number[] }
}

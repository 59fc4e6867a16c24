import { exp, tanh } from '../elementary.ts'
import { checkLength } from '../shape-error.ts'

/** Friction of one joint, as torque against its motion: N·m and rad/s (sliding joints: N and m/s). */
export interface JointFriction {
  /** Per unit of velocity, N·m·s/rad, ≥ 0. */
  readonly viscous: number
  /** Magnitude that does not depend on speed, ≥ 0. */
  readonly coulomb: number
  /** What breaking away adds to Coulomb friction; fades as speed rises, ≥ 0. */
  readonly stribeck: number
  /** Speed at which the Stribeck part has fallen to 1/e, > 0. */
  readonly stribeckVelocity: number
  /** Speed over which the sign of the velocity is smoothed, > 0: sign is replaced by tanh(q̇ / smoothing). */
  readonly smoothing: number
}

/**
 * Friction torque that the motor has to overcome; positive for positive velocity.
 *
 * @param friction  length n, in joint order
 * @param qd        velocity, length n
 * @param tau       out, length n; overwritten
 * @throws {ShapeError} a length is not n
 * Source: viscous + (Coulomb + Stribeck · e^−(q̇/v)²) · sign(q̇), Armstrong-Hélouvry, Dupont, Canudas de Wit (1994); tanh for
 * sign is common practice, no source: it removes the jump that makes controllers chatter.
 */
export function frictionTorque(friction: readonly JointFriction[], qd: Float64Array, tau: Float64Array): void {
  checkLength('qd', qd.length, friction.length, 'one per joint')
  checkLength('tau', tau.length, friction.length, 'one per joint')
  for (let i = 0; i < friction.length; i++) tau[i] = jointFriction(friction[i], qd[i])
}

/** Friction torque of one joint at velocity v, see {@link frictionTorque}. */
export function jointFriction({ viscous, coulomb, stribeck, stribeckVelocity, smoothing }: JointFriction, v: number): number {
  const ratio = v / stribeckVelocity
  return viscous * v + (coulomb + stribeck * exp(-ratio * ratio)) * tanh(v / smoothing)
}

/** Derivative of {@link jointFriction} with respect to velocity; negative where the Stribeck part falls. */
export function jointFrictionSlope(
  { viscous, coulomb, stribeck, stribeckVelocity, smoothing }: JointFriction,
  v: number,
): number {
  const ratio = v / stribeckVelocity
  const fading = stribeck * exp(-ratio * ratio)
  const sign = tanh(v / smoothing)
  return viscous + ((coulomb + fading) * (1 - sign * sign)) / smoothing - (2 * ratio * fading * sign) / stribeckVelocity
}

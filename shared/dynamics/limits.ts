/**
 * What an arm can bear, as far as predicting and adapting need to know it. n joints, in joint order, SI units
 * (prismatic joints: N and N/s).
 */
export interface ArmLimits {
  /** Largest magnitude of torque per joint, length n, N·m, each above 0. */
  readonly torque: Float64Array
  /** Largest change of torque per second and joint, length n, N·m/s, each above 0; null where the arm states none. */
  readonly torqueRate: Float64Array | null
}

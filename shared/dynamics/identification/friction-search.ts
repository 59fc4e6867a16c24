import { exp, tanh } from '../elementary.ts'
import { factorise, solveFactorised } from './symmetric.ts'

/** Columns of one joint beside the inertial ones: offset, viscous, Coulomb, Stribeck. */
export const FRICTION_COLUMNS = 4

/** The speeds of one joint's friction in which torque is not linear. */
export interface FrictionSpeeds {
  readonly smoothing: number
  readonly stribeckVelocity: number
}

/** Writes the columns 1, q̇, tanh(q̇/v), e^−(q̇/s)² tanh(q̇/v) of one velocity. */
export function frictionColumns(
  velocity: number, { smoothing, stribeckVelocity }: FrictionSpeeds, out: Float64Array, at: number,
): void {
  const sign = tanh(velocity / smoothing)
  const ratio = velocity / stribeckVelocity
  out[at] = 1
  out[at + 1] = velocity
  out[at + 2] = sign
  out[at + 3] = sign * exp(-ratio * ratio)
}

/** Shares of the joint's root mean square speed that the search begins with. */
const smoothings = [0.01, 0.02, 0.04, 0.08, 0.16, 0.32]
const stribeckVelocities = [0.05, 0.1, 0.2, 0.4, 0.8]
const refinements = [1.4, 1.18, 1.08, 1.03]

/**
 * The two speeds of a joint's friction that leave the least of what its other torques do not explain: a coarse grid, then
 * steps in ever smaller factors. Offset, viscous, Coulomb and Stribeck are solved for exactly at every candidate.
 *
 * @param velocity  rows
 * @param residual  rows: torque less the inertial part
 * @param start  speeds to refine; null: search the grid first
 */
export function searchSpeeds(velocity: Float64Array, residual: Float64Array, start: FrictionSpeeds | null): FrictionSpeeds {
  const speed = rootMeanSquare(velocity)
  let best = start ?? { smoothing: 0.05 * speed, stribeckVelocity: 0.2 * speed }
  let least = remainder(velocity, residual, best)
  const attempt = (candidate: FrictionSpeeds): boolean => {
    const left = remainder(velocity, residual, candidate)
    if (!(left < least)) return false
    least = left
    best = candidate
    return true
  }
  if (start === null) {
    for (const v of smoothings) {
      for (const s of stribeckVelocities) if (s > v) attempt({ smoothing: v * speed, stribeckVelocity: s * speed })
    }
  }
  for (const factor of refinements) {
    for (let moved = true, tries = 0; moved && tries < 12; tries++) {
      const { smoothing: v, stribeckVelocity: s } = best
      // At rest nothing tells the speeds apart: they stay where a controller can use them.
      const low = 0.002 * speed
      moved = [[v * factor, s], [v / factor, s], [v, s * factor], [v, s / factor]]
        .filter(([smoothing, stribeckVelocity]) => smoothing >= low && stribeckVelocity >= low && stribeckVelocity <= 4 * speed)
        .map(([smoothing, stribeckVelocity]) => attempt({ smoothing, stribeckVelocity }))
        .some(Boolean)
    }
  }
  return best
}

function rootMeanSquare(values: Float64Array): number {
  let sum = 0
  for (const value of values) sum += value * value
  return Math.sqrt(sum / values.length) || 1
}

const work = {
  columns: new Float64Array(FRICTION_COLUMNS),
  normal: new Float64Array(FRICTION_COLUMNS * FRICTION_COLUMNS),
  right: new Float64Array(FRICTION_COLUMNS),
  solution: new Float64Array(FRICTION_COLUMNS),
}

/** Sum of squares that the four columns leave of the residual. */
function remainder(velocity: Float64Array, residual: Float64Array, speeds: FrictionSpeeds): number {
  const { columns, normal, right, solution } = work
  normal.fill(0)
  right.fill(0)
  let total = 0
  for (let row = 0; row < velocity.length; row++) {
    frictionColumns(velocity[row], speeds, columns, 0)
    const y = residual[row]
    total += y * y
    for (let r = 0; r < FRICTION_COLUMNS; r++) {
      right[r] += columns[r] * y
      for (let c = 0; c <= r; c++) normal[FRICTION_COLUMNS * r + c] += columns[r] * columns[c]
    }
  }
  for (let r = 0; r < FRICTION_COLUMNS; r++) normal[FRICTION_COLUMNS * r + r] += 1e-9 * velocity.length
  if (!factorise(normal, FRICTION_COLUMNS)) return Infinity
  solution.set(right)
  solveFactorised(normal, FRICTION_COLUMNS, solution)
  // What a negative coefficient explains is no friction.
  if (solution[1] < 0 || solution[2] < 0 || solution[3] < 0) return total
  let explained = 0
  for (let r = 0; r < FRICTION_COLUMNS; r++) explained += solution[r] * right[r]
  return total - explained
}

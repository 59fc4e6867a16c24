import type { Motion } from '../motion.ts'
import { checkLength } from '../shape-error.ts'
import type { Random } from '../random.ts'
import type { Normalisation } from '../version.ts'
import { PAYLOAD_SCALES, type Basis } from './basis.ts'
import type { LinearRows } from './update.ts'

/** A motion as a linear scheme sees it. */
export interface LinearMotion extends LinearRows {
  readonly name: string
  readonly rows: number
  /** Whether nothing is in the gripper all along: an adaptation must not hurt there. */
  readonly unloaded: boolean
  /** Times at which the payload changes, rising; null: not known, so no row says anything of another. */
  readonly changes: readonly number[] | null
}

/** What a base says of rows: torque in SI units, rows × n, overwritten. */
export interface BaseEvaluator {
  evaluate(states: Float64Array, rows: number, torque: Float64Array): void
}

/** What is known of a motion beside its rows. */
export interface MotionContext {
  readonly unloaded: boolean
  readonly changes: readonly number[] | null
}

/**
 * Evaluates base and basis on a motion.
 *
 * @throws {ShapeError} the motion's columns do not fit the basis
 */
export function prepareMotion(
  motion: Motion, base: BaseEvaluator, basis: Basis, normalisation: Normalisation, context: MotionContext,
): LinearMotion {
  const { inputMean, inputStd, outputStd } = normalisation
  const { joints, size } = basis
  const { rows, states, torque, time, name } = motion
  checkLength(`${name}: states`, states.length, 3 * joints * rows, `${rows} rows of ${joints} joints`)
  checkLength(`${name}: torque`, torque.length, joints * rows, `${rows} rows of ${joints} joints`)
  const residual = new Float64Array(rows * joints)
  base.evaluate(states, rows, residual)
  for (let k = 0; k < residual.length; k++) residual[k] = (torque[k] - residual[k]) / outputStd[k % joints]
  const table = new Float64Array(rows * joints * size)
  basis.evaluate(states, rows, table)
  return {
    name, rows, time, residual, basis: table, ...context,
    x: states.map((value, k) => (value - inputMean[k % inputMean.length]) / inputStd[k % inputStd.length]),
  }
}

/** Payloads that are drawn when motions with simulated ones are made. */
export interface PayloadRange {
  /** kg. */
  readonly mass: readonly [number, number]
  /** m, in the flange frame, of the centre of mass: x, y, z. */
  readonly centerOfMass: readonly (readonly [number, number])[]
}

/** A payload drawn from the range, as z in units of PAYLOAD_SCALES, length 4. */
export function drawPayload({ mass, centerOfMass }: PayloadRange, random: Random): Float64Array {
  const uniform = ([low, high]: readonly [number, number]) => low + (high - low) * random.uniform()
  const m = uniform(mass)
  return Float64Array.of(m / PAYLOAD_SCALES[0], ...centerOfMass.map((range, k) => (m * uniform(range)) / PAYLOAD_SCALES[k + 1]))
}

/**
 * An unloaded motion with a payload simulated onto it by its regressor, all along or gripped and released at random times.
 *
 * @param motion  prepared with a payload basis
 * @param z  payload in units of PAYLOAD_SCALES, length 4
 * @param switching  gripped within the second quarter, released within the third or fourth
 */
export function simulatePayload(motion: LinearMotion, z: Float64Array, switching: boolean, random: Random): LinearMotion {
  const { rows, time, basis } = motion
  const joints = motion.residual.length / rows
  const size = basis.length / motion.residual.length
  const from = switching ? Math.floor(rows * (0.25 + 0.15 * random.uniform())) : 0
  const to = switching ? Math.floor(rows * (0.6 + 0.2 * random.uniform())) : rows
  const residual = motion.residual.slice()
  for (let k = from * joints; k < to * joints; k++) for (let c = 0; c < z.length; c++) residual[k] += basis[k * size + c] * z[c]
  return {
    ...motion, name: `${motion.name}, simulated payload`, residual, unloaded: false,
    changes: switching ? [time[from], time[Math.min(to, rows - 1)]] : [],
  }
}

/** What common grippers carry, where nobody says: up to 4 kg, within 5 cm beside and 2 to 12 cm before the flange. */
export const defaultPayloadRange: PayloadRange = {
  mass: [0.3, 4], centerOfMass: [[-0.05, 0.05], [-0.05, 0.05], [0.02, 0.12]],
}

/** Scale of friction that comes and goes with warmth and wear: what is drawn for the fifth state, in units of PAYLOAD_SCALES. */
const frictionRange = [-1, 1.5] as const

/**
 * Motions with simulated payloads made from unloaded ones: of each one loaded all along and one that grips and releases; half
 * of all under another friction where the basis has a scale for it.
 */
export function simulatedMotions(unloaded: readonly LinearMotion[], random: Random, range: PayloadRange = defaultPayloadRange): LinearMotion[] {
  return unloaded.flatMap(motion => [false, true].map(switching => {
    const loaded = simulatePayload(motion, drawPayload(range, random), switching, random)
    const size = loaded.basis.length / loaded.residual.length
    if (size <= 4 || random.uniform() < 0.5) return loaded
    const scale = frictionRange[0] + (frictionRange[1] - frictionRange[0]) * random.uniform()
    for (let k = 0; k < loaded.residual.length; k++) loaded.residual[k] += scale * loaded.basis[k * size + 4]
    return loaded
  }))
}

import type { Motion } from '../motion.ts'
import { checkLength } from '../shape-error.ts'
import type { Random } from '../random.ts'
import type { Normalisation } from '../version.ts'
import { PAYLOAD_SCALES } from './basis.ts'
import type { Basis } from './basis.ts'
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
 * @param motion  prepared with any basis
 * @param payload  the payload basis on its rows, rows × n × p: the motion's own basis where that is one
 * @param z  payload in units of PAYLOAD_SCALES, length 4
 * @param switching  gripped within the second quarter, released within the third or fourth
 */
export function simulatePayload(
  motion: LinearMotion, payload: Float64Array, z: Float64Array, switching: boolean, random: Random,
): LinearMotion {
  const { rows, time } = motion
  const joints = motion.residual.length / rows
  const size = payload.length / motion.residual.length
  const from = switching ? Math.floor(rows * (0.25 + 0.15 * random.uniform())) : 0
  const to = switching ? Math.floor(rows * (0.6 + 0.2 * random.uniform())) : rows
  const residual = motion.residual.slice()
  for (let k = from * joints; k < to * joints; k++) for (let c = 0; c < z.length; c++) residual[k] += payload[k * size + c] * z[c]
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
 * of all under another friction where the payload basis has a scale for it.
 *
 * @param payload  evaluates the payload basis on a motion; null: the motions' own basis is one
 */
export function simulatedMotions(
  unloaded: readonly LinearMotion[], random: Random, payload: ((motion: LinearMotion) => Float64Array) | null = null,
  range: PayloadRange = defaultPayloadRange,
): LinearMotion[] {
  return unloaded.flatMap(motion => [false, true].map(switching => {
    const table = payload ? payload(motion) : motion.basis
    const loaded = simulatePayload(motion, table, drawPayload(range, random), switching, random)
    const size = table.length / loaded.residual.length
    if (size <= 4 || random.uniform() < 0.5) return loaded
    const scale = frictionRange[0] + (frictionRange[1] - frictionRange[0]) * random.uniform()
    for (let k = 0; k < loaded.residual.length; k++) loaded.residual[k] += scale * table[k * size + 4]
    return loaded
  }))
}

/**
 * Motions that no arm made, to fit a learned basis on: in every row position, velocity and acceleration come from three rows
 * drawn from the recordings, and the residual is a payload's alone. They fill the space between recordings, without which a
 * learned basis does not carry over to motions it has not seen.
 *
 * @param motions  where rows are drawn from
 * @param payload  a payload basis
 * @param count  payloads, one per motion of `rows` rows
 */
export function mixedMotions(
  motions: readonly Motion[], payload: Basis, normalisation: Normalisation, count: number, rows: number, random: Random,
  range: PayloadRange = defaultPayloadRange,
): LinearMotion[] {
  const { joints, size } = payload
  const nothing: BaseEvaluator = { evaluate: (_states, _rows, torque) => void torque.fill(0) }
  return Array.from({ length: count }, (_, index) => {
    const states = new Float64Array(rows * 3 * joints)
    for (let row = 0; row < rows; row++) {
      for (let part = 0; part < 3; part++) {
        const from = motions[random.integer(motions.length)]
        const at = 3 * joints * random.integer(from.rows) + part * joints
        states.set(from.states.subarray(at, at + joints), row * 3 * joints + part * joints)
      }
    }
    const motion: Motion = {
      name: `simulated ${index + 1}`, rows, states, time: Float64Array.from({ length: rows }, (__, row) => row),
      torque: new Float64Array(rows * joints),
    }
    const prepared = prepareMotion(motion, nothing, payload, normalisation, { unloaded: false, changes: [] })
    const z = drawPayload(range, random)
    const { residual, basis } = prepared
    residual.fill(0)
    for (let k = 0; k < residual.length; k++) for (let c = 0; c < z.length; c++) residual[k] += basis[k * size + c] * z[c]
    return prepared
  })
}

import { fade } from '../deterministic.ts'
import { exp } from '../elementary.ts'
import { checkLength, ShapeError } from '../shape-error.ts'
import type { Normalisation } from '../version.ts'
import type { Basis } from './basis.ts'
import type { BaseEvaluator } from './linear-motion.ts'
import { addLearned, stepThrough } from './update.ts'
import type { LinearState, LinearUpdate } from './update.ts'

/** A batch as it came, SI units; arrays may be longer than the rows used. */
export interface RawBatch {
  readonly rows: number
  /** s, rising strictly. */
  readonly time: Float64Array
  /** rows × 3n: [position, velocity, acceleration]. */
  readonly states: Float64Array
  /** rows × n: measured torque, N·m (sliding: N). */
  readonly torque: Float64Array
}

/** What a linear core is made of. */
export interface LinearCoreInputs {
  readonly base: BaseEvaluator
  readonly basis: Basis
  readonly update: LinearUpdate
  readonly normalisation: Normalisation
  /** Rows of [position, velocity, acceleration], SI units, on which guards compare predicted torque. */
  readonly referenceStates: readonly (readonly number[])[]
}

/**
 * The numeric work of a linear scheme on batches: what a learner of the adaptation machine needs, with states that the machine
 * owns. One batch is loaded at a time; base and basis are evaluated once for it. States are only changed by `learn`, `age`,
 * `restart` and `read`, always the one that is named `into` or alone.
 */
export interface LinearCore {
  /** References times n: the base's and a state's predictions on the reference states, base standard deviations. */
  readonly baseReference: Float64Array
  initial(): LinearState
  /** Evaluates base and basis on a batch; what follows is about its rows. */
  load(batch: RawBatch): void
  /** rows × n of the loaded batch: measured torque in base standard deviations. */
  readonly measured: Float64Array
  /** Torque in base standard deviations of rows from..to of the batch, to the same rows of out; null: the base alone. */
  predict(state: LinearState | null, from: number, to: number, out: Float64Array): void
  /** `into` becomes `from` after steps through the batch's first `rows` rows. */
  learn(from: LinearState, rows: number, into: LinearState): void
  /** Lets time pass: what a rejected or stored batch does to a recursive state. */
  age(state: LinearState, time: number): void
  /** A grip or release was declared. */
  open(state: LinearState): void
  /** `into` becomes `from` with its covariance as at the start: what it knows stays, how sure it is does not. */
  restart(from: LinearState, into: LinearState): void
  /** Euclidean norm of the difference of the values; NaN or Infinity where a number is not finite. */
  distance(a: LinearState, b: LinearState): number
  isFinite(state: LinearState): boolean
  /** What a state predicts on the reference states at its own time. */
  reference(state: LinearState, out: Float64Array): void
  /** A prediction ahead of asOf: adds A(x) z + ρ^ahead b for rows of SI states to torque in N·m (sliding: N). */
  addAhead(state: LinearState, states: Float64Array, rows: number, ahead: Float64Array | null, torque: Float64Array): void
  /** Numbers that make up a state, in a fixed order, and how many. */
  readonly stateLength: number
  write(state: LinearState, out: Float64Array): void
  read(values: Float64Array, into: LinearState): void
}

/**
 * Makes a core. Its work areas grow with the batches.
 *
 * @throws {ShapeError} basis, update and normalisation are not of one arm
 */
export function createLinearCore({ base, basis, update, normalisation, referenceStates }: LinearCoreInputs): LinearCore {
  const { joints, size } = basis
  const { inputMean, inputStd, outputMean, outputStd } = normalisation
  checkLength('normalisation.outputStd', outputStd.length, joints, `${joints} joints`)
  if (update.size !== size || update.joints !== joints) {
    throw new ShapeError(
      `The update is for ${update.size} states and ${update.joints} joints, the basis for ${size} and ${joints}.`,
    )
  }
  const share = exp(-update.decay)
  const covarianceLength = update.initial().covariance.length
  const stateLength = size + joints + covarianceLength + 3
  let area = makeArea(64)

  function makeArea(rows: number) {
    const table = () => new Float64Array(rows * joints)
    return {
      rows, time: new Float64Array(rows), x: new Float64Array(rows * 3 * joints), base: table(), measured: table(),
      residual: table(),
      basis: new Float64Array(rows * joints * size), left: new Float64Array(rows), learned: table(),
    }
  }

  function normaliseTorque(torque: Float64Array, rows: number): void {
    for (let k = 0; k < rows * joints; k++) torque[k] = (torque[k] - outputMean[k % joints]) / outputStd[k % joints]
  }

  function load({ rows, time, states, torque }: RawBatch): void {
    if (rows > area.rows) area = makeArea(2 * rows)
    base.evaluate(states, rows, area.base)
    normaliseTorque(area.base, rows)
    basis.evaluate(states, rows, area.basis)
    for (let row = 0; row < rows; row++) area.time[row] = time[row]
    for (let k = 0; k < rows * 3 * joints; k++) {
      const c = k % (3 * joints)
      area.x[k] = (states[k] - inputMean[c]) / inputStd[c]
    }
    for (let k = 0; k < rows * joints; k++) {
      area.measured[k] = (torque[k] - outputMean[k % joints]) / outputStd[k % joints]
      area.residual[k] = area.measured[k] - area.base[k]
    }
  }

  function predict(state: LinearState | null, from: number, to: number, out: Float64Array): void {
    const first = from * joints
    const rows = out.subarray(first, to * joints)
    rows.set(area.base.subarray(first, to * joints))
    if (!state) return
    for (let row = from; row < to; row++) {
      area.left[row - from] = area.time[row] > state.asOf ? fade(share, area.time[row] - state.asOf) : 1
    }
    addLearned(state.values, size, joints, area.basis.subarray(first * size), area.left, to - from, rows)
  }

  const reference = Float64Array.from(referenceStates.flat())
  const references = referenceStates.length
  const baseReference = new Float64Array(references * joints)
  const referenceBasis = new Float64Array(references * joints * size)
  base.evaluate(reference, references, baseReference)
  normaliseTorque(baseReference, references)
  basis.evaluate(reference, references, referenceBasis)

  return {
    baseReference,
    get measured() { return area.measured },
    initial: () => update.initial(),
    load,
    predict,
    learn(from, rows, into) {
      update.copy(from, into)
      stepThrough(update, into, area, 0, rows)
    },
    age: (state, time) => update.letPass(state, time),
    open: state => update.open(state),
    restart(from, into) {
      const { covariance } = update.initial()
      update.copy(from, into)
      into.covariance.set(covariance)
      into.surprise = 0
      into.opening = false
    },
    distance(a, b) {
      let sum = 0
      for (let k = 0; k < a.values.length; k++) {
        const difference = a.values[k] - b.values[k]
        sum += difference * difference
      }
      return Math.sqrt(sum)
    },
    isFinite: state => update.isFinite(state),
    reference(state, out) {
      out.set(baseReference)
      addLearned(state.values, size, joints, referenceBasis, null, references, out)
    },
    addAhead(state, states, rows, ahead, torque) {
      if (rows > area.rows) area = makeArea(2 * rows)
      basis.evaluate(states, rows, area.basis)
      area.learned.fill(0, 0, rows * joints)
      for (let row = 0; row < rows; row++) area.left[row] = ahead ? fade(share, ahead[row]) : 1
      addLearned(state.values, size, joints, area.basis, area.left, rows, area.learned)
      for (let k = 0; k < rows * joints; k++) torque[k] += area.learned[k] * outputStd[k % joints]
    },
    stateLength,
    write({ values, covariance, surprise, opening, asOf }, out) {
      out.set(values)
      out.set(covariance, values.length)
      out.set([surprise, opening ? 1 : 0, asOf], values.length + covariance.length)
    },
    read(numbers, into) {
      const at = into.values.length + into.covariance.length
      into.values.set(numbers.subarray(0, into.values.length))
      into.covariance.set(numbers.subarray(into.values.length, at))
      into.surprise = numbers[at]
      into.opening = numbers[at + 1] === 1
      into.asOf = numbers[at + 2]
    },
  }
}

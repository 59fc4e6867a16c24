import { exp } from '../elementary.ts'
import { absorb, copyState, isFiniteState } from './recursive.ts'
import type { LinearMotion } from './linear-motion.ts'
import type { LinearUpdate } from './update.ts'

/** Settings of the rival. */
export interface LeastSquaresSettings {
  readonly rowsPerStep: number
  /** 1/s: the weight of what was measured falls to e^−forgetting within a second. */
  readonly forgetting: number
  /** Variance of every z before anything is measured, in units of one joint's noise variance. */
  readonly initial: number
}

/**
 * Recursive least squares on z alone with exponential forgetting: the textbook rival to the filter. No bias, every joint
 * weighs the same.
 *
 * Source: Ljung, System Identification (1999), section 11.2 (from memory).
 */
export function createLeastSquares(
  { rowsPerStep, forgetting, initial }: LeastSquaresSettings, size: number, joints: number,
): LinearUpdate {
  const most = 1e3 * initial
  const h = new Float64Array(size)
  const v = new Float64Array(size)
  const w = new Float64Array(size)
  return {
    size, joints, rowsPerStep, decay: 0,
    initial() {
      const covariance = new Float64Array(size * size)
      for (let c = 0; c < size; c++) covariance[c * size + c] = initial
      return { values: new Float64Array(size + joints), covariance, surprise: 0, opening: false, asOf: NaN }
    },
    copy: copyState,
    letPass(state, time) {
      const seconds = time > state.asOf ? time - state.asOf : 0
      if (!(time <= state.asOf)) state.asOf = time
      if (seconds === 0 || forgetting === 0) return
      const growth = exp(forgetting * seconds)
      let largest = 0
      for (let c = 0; c < size; c++) largest = Math.max(largest, state.covariance[c * size + c])
      // Without excitation forgetting would blow the covariance up.
      if (largest * growth > most) return
      for (let k = 0; k < state.covariance.length; k++) state.covariance[k] *= growth
    },
    step(state, { time, residual, basis }, from, to) {
      this.letPass(state, time[to - 1])
      for (let k = from * joints; k < to * joints; k++) {
        for (let c = 0; c < size; c++) h[c] = basis[k * size + c]
        absorb(state.values, state.covariance, size, size, -1, h, residual[k], 1, v, w)
      }
    },
    open: () => {},
    isFinite: isFiniteState,
  }
}

/** The best constant z of a motion, and what it leaves. */
export interface ConstantFit {
  /** Length p. */
  readonly z: Float64Array
  /** Mean squared residual per joint, base standard deviations, length n. */
  readonly perJoint: Float64Array
  /** Their mean: what no adaptation of z alone can beat on average. */
  readonly error: number
}

/** The best constant z of a motion, by least squares with all joints weighing the same. */
export function fitConstant(motion: LinearMotion): ConstantFit {
  const { rows, residual, basis } = motion
  const joints = residual.length / rows
  const size = basis.length / residual.length
  const update = createLeastSquares({ rowsPerStep: rows, forgetting: 0, initial: 1e6 }, size, joints)
  const state = update.initial()
  update.step(state, motion, 0, rows)
  const perJoint = new Float64Array(joints)
  for (let k = 0; k < residual.length; k++) {
    let e = residual[k]
    for (let c = 0; c < size; c++) e -= basis[k * size + c] * state.values[c]
    perJoint[k % joints] += (e * e) / rows
  }
  return { z: state.values.slice(0, size), perJoint, error: perJoint.reduce((sum, value) => sum + value / joints, 0) }
}

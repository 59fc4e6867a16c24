import type { LinearRows, LinearState, LinearUpdate } from './update.ts'

/** A run of consecutive steps that can be differentiated. */
export interface Tape {
  /** K + 1 arrays of d: the values at the start and after every step. */
  readonly values: readonly Float64Array[]
  /** Length K + 1, s: the newest row that each has seen. */
  readonly asOf: Float64Array
  /** Runs K steps of rowsPerStep rows from `row` on; the state moves on. */
  run(state: LinearState, rows: LinearRows, row: number): void
  /**
   * Adds the derivative of an outer error with respect to θ, of the last run.
   *
   * @param slopes  K + 1 arrays of d: derivative of the outer error with respect to `values`; destroyed
   * @param isFresh  whether the run began at an initial state, which depends on θ
   * @param gradient  in and out, length of θ
   */
  addGradient(slopes: readonly Float64Array[], isFresh: boolean, gradient: Float64Array): void
}

/** An update whose constants are learned: θ holds logarithms where constants are positive. */
export interface Learnable {
  /** Index of ln κ in θ. */
  readonly decayIndex: number
  /** The update that θ stands for. */
  update(theta: Float64Array): LinearUpdate
  /** A tape of K steps for this θ. */
  tape(theta: Float64Array, steps: number): Tape
}

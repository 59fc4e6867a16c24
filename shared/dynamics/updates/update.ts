export type UpdateName = 'sgd' | 'adam'

/** One kind of update: how parameters move, given a gradient. */
export interface UpdateKind {
  readonly name: UpdateName
  /** Number of values of its own state, for that many parameters. */
  stateLength(parameterCount: number): number
  /** The state before the first step. */
  initialState(parameterCount: number): Float64Array
  /**
   * One step, in place.
   *
   * @param parameters  in and out
   * @param gradient  same length
   * @param state  in and out, `stateLength` values, from `initialState` or the step before
   * @param rate  step size, positive
   */
  step(parameters: Float64Array, gradient: Float64Array, state: Float64Array, rate: number): void
}

/** What an adaptation changes. `payload` and `context` join this list together with the recursive update. */
export type Scheme = 'all' | 'last_layer' | 'bias'

/** How it changes it. */
export interface UpdateSettings {
  /** Plain gradient steps, or Adam (Kingma and Ba 2015, ε 1e-8, bias-corrected). */
  readonly kind: 'sgd' | 'adam'
  /** Step size, above 0. */
  readonly rate: number
  /** A batch is applied as consecutive steps of so many rows, in time order; the last one takes what is left. */
  readonly rowsPerStep: number
  /** Scheme `bias`: share of the bias that is left after one second, above 0 to 1. 1 in other schemes, where nothing fades. */
  readonly fade: number
}

/** Bounds and thresholds of the guards of one adaptation. GUARD_FIELDS states range and default of each. */
export interface GuardSettings {
  /** Largest Euclidean norm of one batch's change (all, last_layer: parameters; bias: base standard deviations). */
  readonly stepNorm: number
  /** Largest change of predicted torque by one batch, on any reference state, as a share of the joint's torque limit. */
  readonly torqueChange: number
  /** Largest distance of predicted torque from the base version's, on any reference state, as a share of the torque limit. */
  readonly drift: number
  /** How much worse than base a joint's root mean square error may be on unseen data: 0.1 is 10 %. */
  readonly tolerance: number
  /** Least root mean square of velocity over the last second that the most moved joint must reach, in base standard deviations of velocity. */
  readonly excitation: number
  /** Longest pause between two rows, in sample periods, across which steps are taken. */
  readonly gapPeriods: number
  /** Rejections in a row after which the adaptation freezes itself. */
  readonly rejectionsBeforeFreeze: number
}

/** Everything that decides, with versions and log, what an adaptation serves. Complete: nothing in it is optional. */
export interface AdaptationSettings {
  readonly scheme: Scheme
  readonly update: UpdateSettings
  readonly guard: GuardSettings
  /** Seconds for which a state is valid after its newest accepted row (the arm's stated horizon). */
  readonly horizon: number
}

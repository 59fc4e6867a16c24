/** What an adaptation changes. `payload` and `context` join this list together with the recursive update. */
export type Scheme = 'all' | 'last_layer' | 'bias'

/** How it changes it: plain gradient steps, or Adam (Kingma and Ba 2015, ε 1e-8, bias-corrected). */
export type UpdateSettings =
  | { readonly kind: 'sgd'; readonly rate: number; readonly rowsPerStep: number }
  | { readonly kind: 'adam'; readonly rate: number; readonly rowsPerStep: number; readonly beta1: number; readonly beta2: number }

/** Bounds and thresholds of the guards of one adaptation. Every field is a plain number; GUARD_FIELDS states unit and range. */
export interface GuardSettings {
  /** Largest Euclidean norm of one batch's change (all, last_layer: parameters; bias: base standard deviations). */
  readonly maxStepNorm: number
  /** Seconds for which maxStepNorm rests after a grip or a release. */
  readonly stepNormRest: number
  /** Largest change of predicted torque by one batch, on any reference state, as a share of the joint's torque limit. */
  readonly maxTorqueChange: number
  /** Largest distance of predicted torque from the base version's, on any reference state, as a share of the torque limit. */
  readonly maxDrift: number
  /** How much worse than the base version a joint's RMSE may be over the window: 0.1 is 10 %. */
  readonly maxWorse: number
  /** Length of the window for judging small batches and excitation, s. */
  readonly window: number
  /** Least root mean square of velocity over the window, in base standard deviations of velocity, that the most moved joint must reach. */
  readonly minExcitation: number
  /** An error below this many times the noise is not stepped on. */
  readonly noiseFloor: number
  /** Longest pause between two rows, in sample periods, across which steps are taken. */
  readonly maxGap: number
  /** Batches of this many rows or more hold out their newest quarter. */
  readonly holdOutRows: number
  /** Rejections in a row after which the adaptation freezes itself. */
  readonly freezeAfter: number
}

/** Everything that decides, with versions and log, what an adaptation serves. Complete: nothing in it is optional. */
export interface AdaptationSettings {
  readonly scheme: Scheme
  readonly update: UpdateSettings
  /** Share of the bias that is left after one second, 0 to 1; used by the scheme `bias`, 1 elsewhere. */
  readonly rho: number
  /** Seconds for which a state is valid after its newest accepted row (the arm's stated horizon). */
  readonly horizon: number
  readonly guard: GuardSettings
}

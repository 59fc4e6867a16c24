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
  /** What counts as noise when a joint is compared with base, base standard deviations: only an excess above it rejects. */
  readonly toleranceFloor: number
  /** Least root mean square of velocity, in its base standard deviations, that the most moved joint reaches over a second. */
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

/** Batches of this many rows or more hold out their newest quarter; smaller ones are judged prequentially. */
export const HOLD_OUT_ROWS = 32

/** Seconds for which the step-norm bound rests after a grip or a release. */
export const STEP_NORM_REST = 1

/** Most rows of a batch. */
export const MOST_BATCH_ROWS = 1024

/** Range and default of one guard setting. */
export interface GuardField {
  readonly least: number
  readonly most: number
  readonly isInteger: boolean
  readonly unit: string
  /** The default for a scheme and update. */
  standard(scheme: Scheme, update: UpdateSettings): number
}

/**
 * Measured on simulated payload motions, batches of 4 rows, tuned rates: floors at which guards leave the next-batch error
 * alone. A whole network follows a payload at the price of noise on other joints, and Adam at a higher one. With 1.5 a
 * learning at the edge of stability is stopped more often than not to its advantage, yet it is stopped.
 */
function standardFloor(scheme: Scheme, { kind }: UpdateSettings): number {
  if (kind === 'adam') return 4
  return scheme === 'bias' ? 0.75 : 3
}

/** Every guard setting, with the range within which it may be set when an adaptation is created. */
export const GUARD_FIELDS: Readonly<Record<keyof GuardSettings, GuardField>> = {
  stepNorm: {
    least: 1e-6,
    most: 1000,
    isInteger: false,
    unit: 'parameters (all, last_layer), base standard deviations (bias)',
    standard: scheme => (scheme === 'bias' ? 30 : 5),
  },
  torqueChange: { least: 0.001, most: 1, isInteger: false, unit: "share of the joint's torque limit", standard: () => 0.5 },
  drift: {
    least: 0.001,
    most: 2,
    isInteger: false,
    unit: "share of the joint's torque limit",
    standard: (_, { kind }) => (kind === 'adam' ? 2 : 0.75),
  },
  tolerance: { least: 0, most: 1, isInteger: false, unit: 'share', standard: () => 0.1 },
  toleranceFloor: { least: 0, most: 10, isInteger: false, unit: 'base standard deviations', standard: standardFloor },
  excitation: { least: 0, most: 1, isInteger: false, unit: 'base standard deviations of velocity', standard: () => 0.02 },
  gapPeriods: { least: 1.5, most: 100, isInteger: false, unit: 'sample periods', standard: () => 5 },
  rejectionsBeforeFreeze: { least: 1, most: 1000, isInteger: true, unit: 'batches', standard: () => 20 },
}

/** Why a setting is refused: which, and what would do. */
export class SettingError extends RangeError {
  override readonly name = 'SettingError'
  constructor(
    readonly field: string,
    detail: string,
  ) {
    super(`${field}: ${detail}`)
  }
}

/**
 * Completes guard settings with the defaults of a scheme and update.
 *
 * @throws {SettingError} a setting lies outside its range
 */
export function completeGuard(given: Partial<GuardSettings>, scheme: Scheme, update: UpdateSettings): GuardSettings {
  const guard = {} as Record<keyof GuardSettings, number>
  for (const name of Object.keys(GUARD_FIELDS) as (keyof GuardSettings)[]) {
    const { least, most, isInteger, standard } = GUARD_FIELDS[name]
    const value = given[name] ?? standard(scheme, update)
    if (!(value >= least && value <= most) || (isInteger && !Number.isInteger(value))) {
      throw new SettingError(`guard.${name}`, `${value} is outside ${least} to ${most}${isInteger ? ', whole numbers' : ''}.`)
    }
    guard[name] = value
  }
  return guard
}

/**
 * Rates for plain squared error where neither the request nor the version recommends one: below the best on simulated
 * payload motions, since a rate beyond the best one soon diverges. A bias steps by 2 · rate / n of its error, which has to
 * stay below 2 for any number n of joints.
 */
const MSE_RATES: Readonly<Record<Scheme, Readonly<Record<UpdateSettings['kind'], number>>>> = {
  all: { sgd: 0.005, adam: 0.005 },
  last_layer: { sgd: 0.01, adam: 0.003 },
  bias: { sgd: 0.8, adam: 0.3 },
}

/** What a request for an adaptation may leave out. */
export interface RequestedSettings {
  readonly scheme?: Scheme
  readonly update?: Partial<UpdateSettings>
  readonly guard?: Partial<GuardSettings>
}

/**
 * Completes what a request leaves out: first from the recommended settings (the loss version's, or the base version's for
 * plain squared error), then from defaults. Recommended rates count only for the scheme and kind they were found with.
 *
 * @param recommended  null where nothing is recommended
 * @param horizon  the arm's, s
 * @throws {SettingError} a setting lies outside its range
 */
export function completeSettings(
  requested: RequestedSettings,
  recommended: { readonly scheme: Scheme; readonly update: UpdateSettings } | null,
  horizon: number,
): AdaptationSettings {
  const scheme = requested.scheme ?? recommended?.scheme ?? 'all'
  const kind = requested.update?.kind ?? recommended?.update.kind ?? 'sgd'
  const fitting = recommended?.scheme === scheme && recommended.update.kind === kind ? recommended.update : null
  const update: UpdateSettings = {
    kind,
    rate: requested.update?.rate ?? fitting?.rate ?? MSE_RATES[scheme][kind],
    rowsPerStep: requested.update?.rowsPerStep ?? fitting?.rowsPerStep ?? 4,
    fade: scheme === 'bias' ? (requested.update?.fade ?? fitting?.fade ?? 0.7) : 1,
  }
  if (!(update.rate > 0 && update.rate <= 10)) throw new SettingError('update.rate', `${update.rate} is outside 0 to 10.`)
  if (!Number.isInteger(update.rowsPerStep) || update.rowsPerStep < 1 || update.rowsPerStep > MOST_BATCH_ROWS) {
    throw new SettingError('update.rowsPerStep', `${update.rowsPerStep} is outside 1 to ${MOST_BATCH_ROWS}, whole numbers.`)
  }
  if (!(update.fade > 0 && update.fade <= 1)) throw new SettingError('update.fade', `${update.fade} is outside 0 to 1.`)
  return { scheme, update, guard: completeGuard(requested.guard ?? {}, scheme, update), horizon }
}

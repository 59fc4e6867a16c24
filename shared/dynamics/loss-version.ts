import type { Scheme, UpdateSettings } from './adaptation/settings.ts'
import { decodeArtefact, encodeArtefact } from './artefact.ts'
import { lossKinds } from './losses/index.ts'
import type { LossName, LossShape, Positive } from './losses/index.ts'
import { checkLength, ShapeError } from './shape-error.ts'

/** The kinds of learned loss; `mse` has no parameters and needs no version. */
export type LearnedLossKind = Exclude<LossName, 'mse'>

/** The part of a loss version that reads as text. */
export interface LossDescription {
  readonly kind: LearnedLossKind
  /** How weights are made positive; `unstructured` has none and ignores it. */
  readonly positive: Positive
  readonly joints: number
  /** Width of the hidden layer of the loss's network; 0 for `structured`. */
  readonly hidden: number
  /** Checksum of the base version it was learned for, and the only one it serves. */
  readonly baseChecksum: string
  readonly scheme: Scheme
  /** Recommended settings, used where an adaptation states none. */
  readonly update: UpdateSettings
}

/** An immutable version of a loss. */
export interface LossVersion {
  readonly description: LossDescription
  /** In the canonical order of the kind. */
  readonly parameters: Float32Array
}

const MARK = 'HWL1'

/**
 * The loss version as one binary blob, equal to the bit for equal loss versions. Step sizes or filter constants of the
 * linear schemes join `loss` as parts of their own, without a change of format.
 *
 * @throws {ShapeError} checkLossVersion refuses it
 */
export function encodeLossVersion(loss: LossVersion): Uint8Array {
  checkLossVersion(loss)
  const { kind, positive, joints, hidden, baseChecksum, scheme, update } = loss.description
  const description = {
    kind,
    positive,
    joints,
    hidden,
    baseChecksum,
    scheme,
    update: { kind: update.kind, rate: update.rate, rowsPerStep: update.rowsPerStep, fade: update.fade },
  }
  return encodeArtefact(MARK, { description, sections: [{ name: 'loss', values: loss.parameters }] })
}

/**
 * Reads what encodeLossVersion wrote.
 *
 * @throws {RangeError} the bytes are no loss version, or of a newer format
 * @throws {ShapeError} checkLossVersion refuses what they hold
 */
export function decodeLossVersion(bytes: Uint8Array): LossVersion {
  const { description, sections } = decodeArtefact('loss version', MARK, ['loss'], bytes)
  const parameters = sections.find(({ name }) => name === 'loss')?.values
  if (!parameters) throw new RangeError('This loss version has no loss.')
  const loss = { description: description as LossDescription, parameters }
  checkLossVersion(loss)
  return loss
}

/** Sizes of a loss version's function, as the kinds' table takes them. */
export function lossShapeOf({ joints, hidden, positive }: LossDescription): LossShape {
  return { joints, inputs: 3 * joints, hidden, positive }
}

/**
 * Refuses a loss version whose parts do not fit each other.
 *
 * @throws {ShapeError} names the part, what was found and what was expected
 */
export function checkLossVersion({ description, parameters }: LossVersion): void {
  const { kind, positive, joints, hidden, baseChecksum, update } = description
  if (!Object.hasOwn(lossKinds, kind) || (kind as LossName) === 'mse') {
    throw new ShapeError(`kind is ${kind}, expected structured, state_dependent or unstructured.`)
  }
  if (positive !== 'exp' && positive !== 'softplus') throw new ShapeError(`positive is ${positive}, expected exp or softplus.`)
  if (!Number.isInteger(joints) || joints < 1) throw new ShapeError(`joints is ${joints}, expected a positive integer.`)
  if (!Number.isInteger(hidden) || hidden < 0) throw new ShapeError(`hidden is ${hidden}, expected an integer from 0.`)
  if (typeof baseChecksum !== 'string') throw new ShapeError('baseChecksum is missing: a loss belongs to one base version.')
  if (!(update?.rate > 0)) throw new ShapeError(`update.rate is ${update?.rate}, expected a number above 0.`)
  checkLength(
    'parameters',
    parameters.length,
    lossKinds[kind].parameterCount(lossShapeOf(description)),
    `${kind}, ${joints} joints`,
  )
}

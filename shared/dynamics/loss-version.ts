import type { Scheme, UpdateSettings } from './adaptation/settings.ts'

/** The kinds of learned loss; `mse` has no parameters and needs no version. */
export type LearnedLossKind = 'structured' | 'state_dependent' | 'unstructured'

/** The part of a loss version that reads as text. */
export interface LossDescription {
  readonly kind: LearnedLossKind
  /** How weights are made positive. */
  readonly positive: 'exp' | 'softplus'
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
  readonly parameters: Float32Array
}

/** The loss version as one binary blob, equal to the bit for equal loss versions. @throws {ShapeError} parts do not fit */
export declare function encodeLossVersion(loss: LossVersion): Uint8Array

/** Reads what encodeLossVersion wrote. @throws {RangeError} the bytes are no loss version, or of a newer format */
export declare function decodeLossVersion(bytes: Uint8Array): LossVersion

import type { NetworkShape } from './network.ts'

/** How raw rows become network inputs and network outputs become torque; lengths 3n and n, SI units. */
export interface Normalisation {
  readonly inputMean: readonly number[]
  /** Floored by the fit: velocity 0.5 rad/s, acceleration 1.5 rad/s². */
  readonly inputStd: readonly number[]
  readonly outputMean: readonly number[]
  /** The *base standard deviations* in which errors are stated. */
  readonly outputStd: readonly number[]
}

/** Where the fit's data lay, over the 3n channels [position, velocity, acceleration], SI units. */
export interface CoverageStatistics {
  /** 0.5 and 99.5 percentile per channel. */
  readonly low: readonly number[]
  readonly high: readonly number[]
  readonly mean: readonly number[]
  /** Lower triangle, row by row, of the inverse Cholesky factor of the covariance: 3n(3n + 1)/2 numbers. */
  readonly whitening: readonly number[]
  /** 99th percentile of the Mahalanobis distance of the fit's data. */
  readonly d99: number
}

/** The part of a version that reads as text. n joints. */
export interface VersionDescription {
  readonly joints: number
  /** sizes[0] = 3n, last = n. */
  readonly network: NetworkShape
  readonly normalisation: Normalisation
  readonly coverage: CoverageStatistics
  /** Noise of the fit's torque per joint, base standard deviations, length n. */
  readonly noise: readonly number[]
  /** Rows of [position, velocity, acceleration], SI units, on which guards compare predicted torque. At least 1. */
  readonly referenceStates: readonly (readonly number[])[]
}

/** An immutable version of a model: what it says of itself, and its network's parameters in canonical order. */
export interface Version {
  readonly description: VersionDescription
  readonly parameters: Float32Array
}

/**
 * The version as one binary blob, equal to the bit for equal versions, so that its SHA-256 names it.
 *
 * @throws {ShapeError} a part does not fit the others
 */
export declare function encodeVersion(version: Version): Uint8Array

/**
 * Reads what encodeVersion wrote.
 *
 * @throws {RangeError} the bytes are no version, or one of a newer format
 */
export declare function decodeVersion(bytes: Uint8Array): Version

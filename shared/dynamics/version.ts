import { decodeArtefact, encodeArtefact } from './artefact.ts'
import { parameterCount } from './network.ts'
import type { NetworkShape } from './network.ts'
import { checkLength, ShapeError } from './shape-error.ts'

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

const MARK = 'HWV1'

/**
 * The version as one binary blob, equal to the bit for equal versions, so that its SHA-256 names it. The blob is a list of
 * named parts: a rigid-body base and a basis A(x) join `network` without a change of format.
 *
 * @throws {ShapeError} checkVersion refuses it
 */
export function encodeVersion(version: Version): Uint8Array {
  checkVersion(version)
  const { joints, network, normalisation, coverage, noise, referenceStates } = version.description
  // Every key is written out here: the bytes must not depend on how the caller built his object.
  const description = {
    joints,
    network: { sizes: network.sizes, activation: network.activation },
    normalisation: {
      inputMean: normalisation.inputMean,
      inputStd: normalisation.inputStd,
      outputMean: normalisation.outputMean,
      outputStd: normalisation.outputStd,
    },
    coverage: {
      low: coverage.low,
      high: coverage.high,
      mean: coverage.mean,
      whitening: coverage.whitening,
      d99: coverage.d99,
    },
    noise,
    referenceStates,
  }
  return encodeArtefact(MARK, { description, sections: [{ name: 'network', values: version.parameters }] })
}

/**
 * Reads what encodeVersion wrote.
 *
 * @throws {RangeError} the bytes are no version, or one of a newer format
 * @throws {ShapeError} checkVersion refuses what they hold
 */
export function decodeVersion(bytes: Uint8Array): Version {
  const { description, sections } = decodeArtefact('version', MARK, ['network'], bytes)
  const parameters = sections.find(({ name }) => name === 'network')?.values
  if (!parameters) throw new RangeError('This version has no network.')
  const version = { description: description as VersionDescription, parameters }
  checkVersion(version)
  return version
}

/**
 * Refuses a version whose parts do not fit each other, or that holds numbers which are not finite.
 *
 * @throws {ShapeError} names the part, what was found and what was expected
 */
export function checkVersion({ description, parameters }: Version): void {
  const { joints, network, normalisation, coverage, noise, referenceStates } = description
  if (!Number.isInteger(joints) || joints < 1) throw new ShapeError(`joints is ${joints}, expected a positive integer.`)
  const channels = 3 * joints
  const { sizes } = network
  if (sizes[0] !== channels || sizes.at(-1) !== joints) {
    throw new ShapeError(`network.sizes is [${sizes}], expected ${channels} first and ${joints} last for ${joints} joints.`)
  }
  if (network.activation !== 'relu' && network.activation !== 'tanh') {
    throw new ShapeError(`network.activation is ${network.activation}, expected relu or tanh.`)
  }
  checkLength('parameters', parameters.length, parameterCount(network), `a network of sizes ${sizes.join('-')}`)
  checkNumbers('normalisation.inputMean', normalisation.inputMean, channels)
  checkNumbers('normalisation.inputStd', normalisation.inputStd, channels, true)
  checkNumbers('normalisation.outputMean', normalisation.outputMean, joints)
  checkNumbers('normalisation.outputStd', normalisation.outputStd, joints, true)
  checkNumbers('coverage.low', coverage.low, channels)
  checkNumbers('coverage.high', coverage.high, channels)
  checkNumbers('coverage.mean', coverage.mean, channels)
  checkNumbers('coverage.whitening', coverage.whitening, (channels * (channels + 1)) / 2)
  checkNumbers('coverage.d99', [coverage.d99], 1, true)
  checkNumbers('noise', noise, joints, true)
  if (!(referenceStates?.length >= 1)) throw new ShapeError('referenceStates is empty, expected at least one row.')
  referenceStates.forEach((row, index) => checkNumbers(`referenceStates[${index}]`, row, channels))
  for (let k = 0; k < parameters.length; k++) {
    if (!Number.isFinite(parameters[k]))
      throw new ShapeError(`parameters: value ${k} is ${parameters[k]}, expected a finite number.`)
  }
}

function checkNumbers(what: string, list: readonly number[], length: number, positive = false): void {
  if (!Array.isArray(list)) throw new ShapeError(`${what} is no list of numbers.`)
  checkLength(what, list.length, length, 'one per channel or joint')
  list.forEach((value, index) => {
    if (!Number.isFinite(value) || (positive && value <= 0)) {
      throw new ShapeError(`${what}: value ${index} is ${value}, expected a ${positive ? 'positive' : 'finite'} number.`)
    }
  })
}

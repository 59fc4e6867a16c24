import type { LossVersion } from '../dynamics/loss-version.ts'
import type { Version, VersionDescription } from '../dynamics/version.ts'
import { checkLossVersion } from '../dynamics/loss-version.ts'
import { ShapeError } from '../dynamics/shape-error.ts'
import { checkVersion } from '../dynamics/version.ts'
import type { components } from './openapi.generated.ts'

type Schemas = components['schemas']

/** The `description` of a version's snapshot: VersionDescription in the contract's words. */
export type WireVersionDescription = {
  joints: number
  network: { sizes: number[]; activation: 'relu' | 'tanh' }
  normalisation: { input_mean: number[]; input_std: number[]; output_mean: number[]; output_std: number[] }
  coverage: { low: number[]; high: number[]; mean: number[]; whitening: number[]; d99: number }
  noise: number[]
  reference_states: number[][]
}

/** The `description` and `parameters` of a version's snapshot. Doubles are written so that they read back as the same bits. */
export function versionToWire(version: Version): { description: WireVersionDescription; parameters: string } {
  const { joints, network, normalisation, coverage, noise, referenceStates } = version.description
  const description: WireVersionDescription = {
    joints,
    network: { sizes: [...network.sizes], activation: network.activation },
    normalisation: {
      input_mean: [...normalisation.inputMean],
      input_std: [...normalisation.inputStd],
      output_mean: [...normalisation.outputMean],
      output_std: [...normalisation.outputStd],
    },
    coverage: {
      low: [...coverage.low],
      high: [...coverage.high],
      mean: [...coverage.mean],
      whitening: [...coverage.whitening],
      d99: coverage.d99,
    },
    noise: [...noise],
    reference_states: referenceStates.map((row) => [...row]),
  }
  return { description, parameters: floatsToBase64(version.parameters) }
}

/**
 * The version in a snapshot.
 *
 * @throws {ShapeError} a part is missing, unknown, of the wrong size or not finite; names it
 */
export function versionFromWire(description: object, parameters: string): Version {
  const given = partsOf('description', description, [
    'joints',
    'network',
    'normalisation',
    'coverage',
    'noise',
    'reference_states',
  ])
  const network = partsOf('description.network', given.network, ['sizes', 'activation'])
  const normalisation = partsOf('description.normalisation', given.normalisation, [
    'input_mean',
    'input_std',
    'output_mean',
    'output_std',
  ])
  const coverage = partsOf('description.coverage', given.coverage, ['low', 'high', 'mean', 'whitening', 'd99'])
  if (!Array.isArray(network.sizes)) throw new ShapeError('description.network.sizes is no list of layer widths.')
  if (!Array.isArray(given.reference_states)) throw new ShapeError('description.reference_states is no list of rows.')
  const read = {
    joints: given.joints,
    network,
    normalisation: {
      inputMean: normalisation.input_mean,
      inputStd: normalisation.input_std,
      outputMean: normalisation.output_mean,
      outputStd: normalisation.output_std,
    },
    coverage,
    noise: given.noise,
    referenceStates: given.reference_states,
  } as unknown as VersionDescription
  const version = { description: read, parameters: floatsFromBase64('parameters', parameters) }
  checkVersion(version)
  return version
}

/** The `description` of a loss's snapshot: the shape of the loss function. */
export type WireLossDescription = {
  positive: 'exp' | 'softplus'
  joints: number
  hidden: number
}

/** What of a loss's snapshot the loss itself says. */
export type WireLoss = Pick<
  Schemas['LossSnapshot'],
  'kind' | 'base_checksum' | 'scheme' | 'update' | 'description' | 'parameters'
>

/** The loss in the contract's words. */
export function lossToWire({ description, parameters }: LossVersion): WireLoss {
  const { kind, positive, joints, hidden, baseChecksum, scheme, update } = description
  const shape: WireLossDescription = { positive, joints, hidden }
  return {
    kind,
    base_checksum: baseChecksum,
    scheme,
    update: updateToWire(scheme, update),
    description: { ...shape },
    parameters: floatsToBase64(parameters),
  }
}

/**
 * The loss version in a snapshot.
 *
 * @throws {ShapeError} a part is missing, unknown, of the wrong size or not finite; names it
 */
export function lossFromWire(given: WireLoss): LossVersion {
  const shape = partsOf('description', given.description, ['positive', 'joints', 'hidden'])
  const { kind, rate, rows_per_step: rowsPerStep = 4, fade = 1 } = given.update
  if (rate === undefined) throw new ShapeError('update.rate is missing: a loss is learned together with its rate.')
  const loss = {
    description: {
      kind: given.kind,
      ...shape,
      baseChecksum: given.base_checksum,
      scheme: given.scheme,
      update: { kind, rate, rowsPerStep, fade },
    },
    parameters: floatsFromBase64('parameters', given.parameters),
  } as unknown as LossVersion
  checkLossVersion(loss)
  for (const [k, value] of loss.parameters.entries()) {
    if (!Number.isFinite(value)) throw new ShapeError(`parameters: value ${k} is ${value}, expected a finite number.`)
  }
  return loss
}

/** An update in the contract's words; `fade` belongs to the scheme bias alone. */
export function updateToWire(
  scheme: Schemas['Scheme'],
  { kind, rate, rowsPerStep, fade }: { kind: 'sgd' | 'adam'; rate: number; rowsPerStep: number; fade: number },
): Schemas['Update'] {
  return { kind, rate, rows_per_step: rowsPerStep, ...(scheme === 'bias' && { fade }) }
}

/** Torque-rate limits, of which a joint without one has the largest double: on the wire it has null. */
export function rateLimitsToWire(limits: Iterable<number> | null): Schemas['RateLimits'] {
  return limits && Array.from(limits, (limit) => (limit === Number.MAX_VALUE ? null : limit))
}

/** Reads what rateLimitsToWire wrote; snapshots made before there were rate limits in them have none. */
export function rateLimitsFromWire(limits: Schemas['RateLimits'] | undefined): Float64Array | null {
  return limits ? Float64Array.from(limits, (limit) => limit ?? Number.MAX_VALUE) : null
}

/** Numbers as base64 of their binary32, little endian. */
export function floatsToBase64(values: Float32Array): string {
  const view = new DataView(new ArrayBuffer(4 * values.length))
  values.forEach((value, k) => view.setFloat32(4 * k, value, true))
  const bytes = new Uint8Array(view.buffer)
  let text = ''
  // In pieces: String.fromCharCode takes its bytes as arguments, and engines limit their number.
  for (let at = 0; at < bytes.length; at += 8192) text += String.fromCharCode(...bytes.subarray(at, at + 8192))
  return btoa(text)
}

/**
 * Reads what floatsToBase64 wrote.
 *
 * @throws {ShapeError} it is not base64, or not a whole number of binary32 values
 */
export function floatsFromBase64(what: string, base64: string): Float32Array {
  let text: string
  try {
    text = atob(base64)
  } catch {
    throw new ShapeError(`${what} is not base64 (RFC 4648, section 4).`)
  }
  if (text.length % 4 !== 0) throw new ShapeError(`${what} has ${text.length} bytes, no whole number of 4-byte values.`)
  const view = new DataView(new ArrayBuffer(text.length))
  for (let k = 0; k < text.length; k++) view.setUint8(k, text.charCodeAt(k))
  return Float32Array.from({ length: text.length / 4 }, (_, k) => view.getFloat32(4 * k, true))
}

function partsOf<K extends string>(what: string, given: unknown, names: readonly K[]): Record<K, unknown> {
  if (typeof given !== 'object' || given === null || Array.isArray(given))
    throw new ShapeError(`${what} is missing or no object.`)
  for (const name of names) if (!Object.hasOwn(given, name)) throw new ShapeError(`${what}.${name} is missing.`)
  for (const name of Object.keys(given)) {
    if (!(names as readonly string[]).includes(name)) throw new ShapeError(`${what}.${name} is not a part this program knows.`)
  }
  return given as Record<K, unknown>
}

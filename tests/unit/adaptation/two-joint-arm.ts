import {
  completeSettings,
  createKernels,
  createPrediction,
  createPredictor,
  lossKinds,
  type Adaptation,
  type AdaptationInputs,
  type BatchEntry,
  type BatchOutcome,
  type LossVersion,
  type RequestedSettings,
  type Version,
} from '../../../shared/dynamics/index.ts'
import { initialParameters } from '../../../shared/dynamics/network.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'

export const joints = 2
export const period = 0.02
export const kernels = createKernels()

/** An invented arm of two joints: a network of random weights, 2 N·m and 0.5 N·m per base standard deviation. */
export const version: Version = (() => {
  const network = { sizes: [6, 8, joints], activation: 'relu' as const }
  const random = createRandom(7)
  const referenceStates = Array.from({ length: 5 }, () => Array.from({ length: 6 }, () => random.normal()))
  const list = (length: number, value: number) => new Array<number>(length).fill(value)
  return {
    description: {
      joints,
      network,
      normalisation: { inputMean: list(6, 0.1), inputStd: list(6, 0.5), outputMean: [3, 0.2], outputStd: [2, 0.5] },
      coverage: {
        low: list(6, -2),
        high: list(6, 2),
        mean: list(6, 0),
        whitening: Array.from({ length: 21 }, (_, k) => ([0, 2, 5, 9, 14, 20].includes(k) ? 1 : 0)),
        d99: 4,
      },
      noise: [0.01, 0.01],
      referenceStates,
    },
    parameters: Float32Array.from(initialParameters(network, random)),
  }
})()

export const limits = { torque: Float64Array.of(100, 25), torqueRate: Float64Array.of(500, 100) }

export function lossOf(kind: LossVersion['description']['kind'], scheme: 'all' | 'last_layer' | 'bias'): LossVersion {
  const shape = { joints, inputs: 6, hidden: kind === 'structured' ? 0 : 4, positive: 'exp' as const }
  return {
    description: {
      kind,
      positive: 'exp',
      joints,
      hidden: shape.hidden,
      baseChecksum: 'of-this-version',
      scheme,
      update: { kind: 'sgd', rate: 0.05, rowsPerStep: 4, fade: scheme === 'bias' ? 0.6 : 1 },
    },
    parameters: Float32Array.from(lossKinds[kind].initialParameters(shape, createRandom(5))),
  }
}

export function inputsOf(requested: RequestedSettings = {}, loss: LossVersion | 'mse' = 'mse'): AdaptationInputs {
  return {
    version,
    loss,
    limits,
    settings: completeSettings(requested, null, 0.5),
    jointNames: ['swivel', 'lift'],
    units: ['N·m', 'N·m'],
  }
}

const base = createPredictor(kernels, version, { torque: Float64Array.of(1e9, 1e9), torqueRate: null })

/** What a batch may differ in from a lively motion whose torque is base's plus an offset. */
export interface BatchOptions {
  readonly rows?: number
  /** Time of its first row, s. */
  readonly from?: number
  /** What is added to base's torque, base standard deviations, per row and joint. */
  readonly offset?: (row: number, joint: number, time: number) => number
  /** Amplitude of the motion; 0 is rest. */
  readonly amplitude?: number
  readonly skipped?: number
}

/** A stretch of a smooth motion at 50 Hz and the torque of an arm that is base's plus the offset. */
export function batch(sequence: number, options: BatchOptions = {}): BatchEntry {
  const { rows = 4, from = (sequence - 1) * 4 * period, offset = () => 0.5, amplitude = 0.6, skipped = 0 } = options
  const { outputStd } = version.description.normalisation
  const entry = {
    kind: 'batch' as const,
    sequence,
    skipped,
    rows,
    time: Float64Array.from({ length: rows }, (_, row) => from + row * period),
    position: new Float64Array(rows * joints),
    velocity: new Float64Array(rows * joints),
    acceleration: new Float64Array(rows * joints),
    torque: new Float64Array(rows * joints),
  }
  for (let row = 0; row < rows; row++) {
    for (let j = 0; j < joints; j++) {
      const [k, w] = [row * joints + j, 2 + j]
      entry.position[k] = amplitude * Math.sin(w * entry.time[row])
      entry.velocity[k] = amplitude * w * Math.cos(w * entry.time[row])
      entry.acceleration[k] = -amplitude * w * w * Math.sin(w * entry.time[row])
    }
  }
  const { torque } = predictBase(entry)
  for (let k = 0; k < rows * joints; k++) {
    entry.torque[k] =
      torque[k] + offset(Math.floor(k / joints), k % joints, entry.time[Math.floor(k / joints)]) * outputStd[k % joints]
  }
  return entry
}

export function predictBase(entry: BatchEntry) {
  const into = createPrediction(entry.rows, joints)
  base.predict({ ...entry, time: null }, into)
  return into
}

/** Prepares and publishes a batch. */
export function send(adaptation: Adaptation, entry: BatchEntry): BatchOutcome {
  const outcome = adaptation.prepare(entry)
  adaptation.publish()
  if (outcome.kind !== 'batch') throw new Error('A batch leads to the outcome of a batch.')
  return outcome
}

/** Torques an adaptation serves for the states of a batch. */
export function predictAdapted(adaptation: Adaptation, entry: BatchEntry, ahead: Float64Array | null = null): Float64Array {
  const into = createPrediction(entry.rows, joints)
  adaptation.predict({ ...entry, time: null }, ahead, into)
  return into.torque
}

export function codesOf({ reasons }: BatchOutcome): string[] {
  return reasons.map(({ code }) => code)
}

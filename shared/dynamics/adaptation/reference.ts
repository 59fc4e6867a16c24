import type { Kernels, NetworkHandle } from '../kernels/kernels.ts'
import { normaliseRow } from './rows.ts'
import type { Version } from '../version.ts'

/** Predictions on a version's reference states, which guards compare. */
export interface Reference {
  readonly states: number
  /** Room for one prediction: states × n. */
  create(): Float64Array
  /** Predicts, in base standard deviations. */
  predict(network: NetworkHandle, out: Float64Array): void
}

/** Normalises a version's reference states once. */
export function createReference(kernels: Kernels, { description }: Version): Reference {
  const { joints, referenceStates, normalisation } = description
  const states = referenceStates.length
  const x = new Float32Array(states * 3 * joints)
  referenceStates.forEach((row, state) => normaliseRow(row, normalisation, x, state * 3 * joints))
  const outputs = new Float32Array(states * joints)
  return {
    states,
    create: () => new Float64Array(states * joints),
    predict(network, out) {
      kernels.forward(network, x, states, outputs)
      for (let k = 0; k < outputs.length; k++) out[k] = outputs[k]
    },
  }
}

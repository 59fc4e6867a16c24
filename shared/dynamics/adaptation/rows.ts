import type { Normalisation } from '../version.ts'
import type { BatchEntry } from './adaptation.ts'
import type { Rows } from './learner.ts'

/** Writes one normalised input row: (value − mean) / std in double precision, then rounded to f32, as the kernels do. */
export function normaliseRow(row: ArrayLike<number>, { inputMean, inputStd }: Normalisation, x: Float32Array, at: number): void {
  for (let c = 0; c < row.length; c++) x[at + c] = (row[c] - inputMean[c]) / inputStd[c]
}

/** A version's scales in typed arrays. */
export interface Scales {
  readonly joints: number
  readonly inputMean: Float64Array
  readonly inputStd: Float64Array
  readonly outputMean: Float64Array
  readonly outputStd: Float64Array
}

export function createScales({ inputMean, inputStd, outputMean, outputStd }: Normalisation): Scales {
  return {
    joints: outputMean.length,
    inputMean: Float64Array.from(inputMean),
    inputStd: Float64Array.from(inputStd),
    outputMean: Float64Array.from(outputMean),
    outputStd: Float64Array.from(outputStd),
  }
}

export function createRows(): Rows {
  const nothing = new Float64Array(0)
  return { rows: 0, time: nothing, x: new Float32Array(0), measured: nothing, measured32: new Float32Array(0) }
}

/** Normalises a batch into the work area, which grows when it must. */
export function fillRows(entry: BatchEntry, scales: Scales, into: Rows): void {
  const { rows, position, velocity, acceleration, torque } = entry
  const { joints, inputMean, inputStd, outputMean, outputStd } = scales
  if (into.measured.length < rows * joints) {
    into.x = new Float32Array(rows * 3 * joints)
    into.measured = new Float64Array(rows * joints)
    into.measured32 = new Float32Array(rows * joints)
  }
  const { x, measured, measured32 } = into
  into.rows = rows
  into.time = entry.time
  for (let row = 0, at = 0; row < rows; row++) {
    const p = row * 3 * joints
    const v = p + joints
    const a = v + joints
    for (let j = 0; j < joints; j++, at++) {
      x[p + j] = (position[at] - inputMean[j]) / inputStd[j]
      x[v + j] = (velocity[at] - inputMean[joints + j]) / inputStd[joints + j]
      x[a + j] = (acceleration[at] - inputMean[2 * joints + j]) / inputStd[2 * joints + j]
      measured[at] = (torque[at] - outputMean[j]) / outputStd[j]
      measured32[at] = measured[at]
    }
  }
}

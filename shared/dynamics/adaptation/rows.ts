import type { Kernels } from '../kernels/kernels.ts'
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

/** An empty work area; its handle has to be freed. */
export function createRows(kernels: Kernels, joints: number): Rows {
  const nothing = new Float64Array(0)
  return { rows: 0, time: nothing, x: new Float32Array(0), measured: nothing, handle: kernels.createBatch(3 * joints, joints) }
}

/** Normalises a batch into the work area, which grows when it must. */
export function fillRows(entry: BatchEntry, scales: Scales, into: Rows): void {
  const { rows, position, velocity, acceleration, torque } = entry
  const { joints, inputMean, inputStd, outputMean, outputStd } = scales
  if (into.measured.length < rows * joints) {
    into.x = new Float32Array(rows * 3 * joints)
    into.measured = new Float64Array(rows * joints)
  }
  const { x, measured } = into
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
    }
  }
  into.handle.loadNormalised(x, measured, rows)
}

import type { Motion } from '../../../shared/dynamics/motion.ts'

/** Rows are stored in pieces of at most this many bytes, so that no reader needs a large packet or much memory. */
const MOST_BYTES = 1_000_000

/** Numbers of one stored row: time, then position, velocity, acceleration and torque of n joints; binary64, little endian. */
export function storedWidth(joints: number): number {
  return 1 + 4 * joints
}

export function rowsPerChunk(joints: number): number {
  return Math.floor(MOST_BYTES / (8 * storedWidth(joints)))
}

/** Gathers rows into chunks. `add` answers a full chunk when there is one; `rest` what is left. */
export function createChunkWriter(joints: number): {
  add(row: Float64Array): ArrayBuffer | undefined
  rest(): ArrayBuffer | undefined
} {
  const width = storedWidth(joints)
  const most = rowsPerChunk(joints)
  let view = new DataView(new ArrayBuffer(8 * width * most))
  let rows = 0

  function take(): ArrayBuffer {
    const full = view.buffer.slice(0, 8 * width * rows)
    rows = 0
    return full
  }

  return {
    add(row) {
      for (let k = 0; k < width; k++) view.setFloat64(8 * (rows * width + k), row[k], true)
      rows += 1
      return rows === most ? take() : undefined
    },
    rest: () => {
      const left = rows === 0 ? undefined : take()
      view = new DataView(new ArrayBuffer(0))
      return left
    },
  }
}

/**
 * Chunks as a motion.
 *
 * @throws {RangeError} the chunks do not hold whole rows of n joints
 */
export function motionOfChunks(name: string, joints: number, chunks: readonly Uint8Array[]): Motion {
  const width = storedWidth(joints)
  const bytes = chunks.reduce((sum, chunk) => sum + chunk.byteLength, 0)
  const rows = bytes / (8 * width)
  if (!Number.isInteger(rows))
    throw new RangeError(`Recording ${name}: ${bytes} bytes are no whole number of rows of ${joints} joints.`)
  const time = new Float64Array(rows)
  const states = new Float64Array(rows * 3 * joints)
  const torque = new Float64Array(rows * joints)
  let row = 0
  for (const chunk of chunks) {
    const view = new DataView(chunk.buffer, chunk.byteOffset, chunk.byteLength)
    for (let at = 0; at < chunk.byteLength; at += 8 * width, row++) {
      time[row] = view.getFloat64(at, true)
      for (let k = 0; k < 3 * joints; k++) states[row * 3 * joints + k] = view.getFloat64(at + 8 * (1 + k), true)
      for (let k = 0; k < joints; k++) torque[row * joints + k] = view.getFloat64(at + 8 * (1 + 3 * joints + k), true)
    }
  }
  return { name, rows, time, states, torque }
}

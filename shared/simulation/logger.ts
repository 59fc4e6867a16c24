/** One logged row; each of length n. */
export interface LogRow {
  /** s */
  readonly time: number
  readonly position: Float64Array
  readonly velocity: Float64Array
  readonly acceleration: Float64Array
  readonly torque: Float64Array
}

/** Turns readings of every control cycle into rows at a lower rate. */
export interface Logger {
  /** s by which a row lags behind the newest reading it is made from. */
  readonly lag: number
  /** Takes one cycle's readings; returns a row when one is due. */
  push(time: number, position: Float64Array, torque: Float64Array): LogRow | undefined
}

export interface LoggerSettings {
  readonly joints: number
  /** s between readings. */
  readonly cycle: number
  /** Hz; the cycle rate must be a whole multiple of it. */
  readonly rate: number
  /** s: length of the window that is smoothed over. */
  readonly window?: number
}

/**
 * A logger that fits a parabola to the last readings of each channel and logs it at the middle of its window: position,
 * velocity and acceleration from the encoder, torque by the same filter. All channels lag by the same half window, so they
 * belong together, and the row carries the time of its middle.
 *
 * @throws {RangeError} the rate does not divide the cycle rate
 * Source: Savitzky & Golay (1964), degree 2.
 */
export function createLogger({ joints, cycle, rate, window = 0.06 }: LoggerSettings): Logger {
  const every = Math.round(1 / (rate * cycle))
  if (Math.abs(every * rate * cycle - 1) > 1e-9) {
    throw new RangeError(`rate: ${rate} Hz does not divide the cycle rate of ${1 / cycle} Hz`)
  }
  const half = Math.round(window / cycle / 2)
  const length = 2 * half + 1
  const times = new Float64Array(length)
  const positions = new Float64Array(length * joints)
  const torques = new Float64Array(length * joints)
  // Sums of k² and k⁴ over −half..half.
  const square = (half * (half + 1) * length) / 3
  const fourth = (square * (3 * half * half + 3 * half - 1)) / 5
  const scale = length * fourth - square * square
  let count = 0

  function fit(values: Float64Array, joint: number): [number, number, number] {
    let [sum, first, second] = [0, 0, 0]
    for (let k = -half; k <= half; k++) {
      const value = values[((count + half + k) % length) * joints + joint]
      sum += value
      first += k * value
      second += k * k * value
    }
    return [
      (fourth * sum - square * second) / scale,
      first / square / cycle,
      (2 * (length * second - square * sum)) / scale / (cycle * cycle),
    ]
  }

  return {
    lag: half * cycle,
    push(time, position, torque) {
      const slot = count % length
      times[slot] = time
      positions.set(position, slot * joints)
      torques.set(torque, slot * joints)
      count++
      if (count < length || (count - length) % every !== 0) return undefined
      const row: LogRow = {
        time: times[(count + half) % length],
        position: new Float64Array(joints),
        velocity: new Float64Array(joints),
        acceleration: new Float64Array(joints),
        torque: new Float64Array(joints),
      }
      for (let j = 0; j < joints; j++) {
        ;[row.position[j], row.velocity[j], row.acceleration[j]] = fit(positions, j)
        row.torque[j] = fit(torques, j)[0]
      }
      return row
    },
  }
}

/** Predicted torques along a stretch of the desired trajectory. */
export interface TorqueHorizon {
  /** s, rising, on the motion's clock: used from the first to the last of them. */
  readonly time: Float64Array
  /** rows × n, N·m. */
  readonly torque: Float64Array
  /** s, on the robot's clock: not used after this, whatever times it holds. */
  readonly expires: number
}

/** Where the feed-forward of a cycle came from. */
export type FeedForwardSource = 'horizon' | 'held' | 'local' | 'fallback'

export interface FeedForwardSettings {
  readonly joints: number
  /** N·m/s per joint: how fast the feed-forward may change when its source changes. */
  readonly rampRate: readonly number[]
  /** Cycles for which the last value is held when predictions are missing. */
  readonly holdCycles: number
  /** s without predictions after which the arm's declared fallback takes over. */
  readonly localSeconds: number
  /** Cycles in a row with predictions before they are used again. */
  readonly returnCycles: number
}

/** Counts of cycles per source, and of horizons that came too late to be of use. */
export interface FeedForwardCounters {
  horizon: number
  held: number
  local: number
  fallback: number
  late: number
}

/** The feed-forward part of a controller that is fed predictions from elsewhere. */
export interface FeedForward {
  readonly source: FeedForwardSource
  readonly counters: FeedForwardCounters
  /** Hands over predictions; replaces those for the same times. Late or non-finite ones are dropped whole, and counted. */
  accept(horizon: TorqueHorizon, time: number, now: number): void
  /**
   * The feed-forward of one control cycle.
   *
   * @param time   s, on the motion's clock: it stands still while the arm is stopped
   * @param now    s, on the robot's clock
   * @param cycle  s since the last cycle
   * @param local  torque of the local model, used when predictions are missing, length n
   * @param out    out, length n
   */
  next(time: number, now: number, cycle: number, local: Float64Array, out: Float64Array): void
}

/**
 * Feed-forward with a defined way down when predictions are late: an unexpired horizon; then the last value, held for a few
 * cycles; then, by a ramp within the torque-rate limit, a local model; then the arm's own declared fallback, which the caller
 * sees in `source`. Back up again by the same ramp, after predictions have been there for some cycles in a row.
 *
 * Nothing here waits, and a cycle allocates nothing.
 */
export function createFeedForward(settings: FeedForwardSettings): FeedForward {
  const { joints, rampRate, holdCycles, localSeconds, returnCycles } = settings
  const current = new Float64Array(joints)
  const wanted = new Float64Array(joints)
  const counters: FeedForwardCounters = { horizon: 0, held: 0, local: 0, fallback: 0, late: 0 }
  let horizons: TorqueHorizon[] = []
  let source: FeedForwardSource = 'local'
  let missing = holdCycles
  let missingSeconds = 0
  let present = 0
  let isRamping = true
  let hasStarted = false

  function lookUp(time: number, now: number): boolean {
    // The newest that covers the time wins.
    for (let k = horizons.length - 1; k >= 0; k--) {
      const { time: times, expires } = horizons[k]
      const last = times.length - 1
      if (now > expires || time < times[0] || time > times[last]) continue
      interpolate(horizons[k], time, wanted)
      return true
    }
    return false
  }

  function choose(time: number, now: number, cycle: number): void {
    const isPresent = lookUp(time, now)
    present = isPresent ? present + 1 : 0
    missing = isPresent ? 0 : missing + 1
    missingSeconds = isPresent ? 0 : missingSeconds + cycle
    const wasAway = source === 'local' || source === 'fallback'
    if (isPresent && (!wasAway || present >= returnCycles)) source = 'horizon'
    else if (!isPresent && !wasAway && missing <= holdCycles) source = 'held'
    else if (source === 'fallback' || missingSeconds > localSeconds) source = 'fallback'
    else source = 'local'
    if (wasAway !== (source === 'local' || source === 'fallback')) isRamping = true
  }

  return {
    counters,
    get source() {
      return source
    },
    accept(horizon, time, now) {
      const isUsable = (other: TorqueHorizon): boolean => other.time[other.time.length - 1] > time && other.expires > now
      if (!isUsable(horizon) || !horizon.torque.every(Number.isFinite)) {
        counters.late++
        return
      }
      horizons = [...horizons.filter(isUsable), horizon]
    },
    next(time, now, cycle, local, out) {
      choose(time, now, cycle)
      counters[source]++
      if (source === 'local' || source === 'fallback') wanted.set(local)
      else if (source === 'held') wanted.set(current)
      if (!hasStarted) {
        // At rest before the first cycle the local model is what holds the arm: no ramp from zero.
        current.set(local)
        hasStarted = true
      }
      let isThere = true
      for (let j = 0; j < joints; j++) {
        const most = isRamping ? rampRate[j] * cycle : Infinity
        const change = wanted[j] - current[j]
        if (Math.abs(change) > most) isThere = false
        current[j] += Math.max(-most, Math.min(most, change))
        out[j] = current[j]
      }
      if (isThere) isRamping = false
    },
  }
}

// Linear between samples; the time lies within.
function interpolate({ time, torque }: TorqueHorizon, at: number, out: Float64Array): void {
  const joints = out.length
  let low = 0
  let high = time.length - 1
  while (high - low > 1) {
    const middle = (low + high) >> 1
    if (time[middle] <= at) low = middle
    else high = middle
  }
  const share = high === low ? 0 : (at - time[low]) / (time[high] - time[low])
  for (let j = 0; j < joints; j++)
    out[j] = torque[low * joints + j] + share * (torque[high * joints + j] - torque[low * joints + j])
}

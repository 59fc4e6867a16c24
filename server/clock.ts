/** Wall-clock time; an argument everywhere, so that tests can set it. */
export interface Clock {
  now(): Date
}

export const systemClock: Clock = { now: () => new Date() }

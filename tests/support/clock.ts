import type { Clock } from '../../server/clock.ts'

/** A clock that stands still until it is told. It starts at the real time, which the database's own times agree with. */
export interface TestClock extends Clock {
  advance(ms: number): void
}

export function testClock(start: Date = new Date()): TestClock {
  let ms = start.getTime()
  return {
    now: () => new Date(ms),
    advance: (more) => {
      ms += more
    },
  }
}

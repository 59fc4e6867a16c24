import { describe, expect, it } from 'vitest'
import { createFeedForward } from '../../../shared/simulation/feed-forward.ts'
import type { FeedForward } from '../../../shared/simulation/feed-forward.ts'

const cycle = 0.001
const local = Float64Array.of(1)

function create(): FeedForward {
  return createFeedForward({ joints: 1, rampRate: [1000], holdCycles: 5, localSeconds: 0.1, returnCycles: 10 })
}

/** Runs cycles from a time on; gives the feed-forward of each. */
function run(feedForward: FeedForward, from: number, cycles: number): number[] {
  const out = new Float64Array(1)
  return Array.from({ length: cycles }, (_, k) => {
    feedForward.next(from + k * cycle, from + k * cycle, cycle, local, out)
    return out[0]
  })
}

function horizon(from: number, to: number, torque: number, expires = Infinity) {
  return { time: Float64Array.of(from, to), torque: Float64Array.of(torque, torque), expires }
}

describe('feed-forward from predictions', () => {
  it('starts on the local model, and takes predictions up by a ramp after they have been there for some cycles', () => {
    const feedForward = create()
    feedForward.accept(horizon(0, 1, 11), 0, 0)
    const values = run(feedForward, 0, 30)

    expect(values.slice(0, 9)).toEqual(Array(9).fill(1))
    expect(values.slice(9, 20)).toEqual([2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 11])
  })

  it('interpolates between the samples of a horizon', () => {
    const feedForward = create()
    feedForward.accept({ time: Float64Array.of(0, 0.02, 0.04), torque: Float64Array.of(1, 1, 3), expires: 1 }, 0, 0)
    run(feedForward, 0, 20)

    expect(run(feedForward, 0.03, 1)[0]).toBeCloseTo(2, 12)
  })

  it('holds the last value for the declared cycles, then ramps to the local model, then falls back', () => {
    const feedForward = create()
    feedForward.accept(horizon(0, 0.0495, 11), 0, 0)
    run(feedForward, 0, 50)
    const values = run(feedForward, 0.05, 20)

    expect(values.slice(0, 5)).toEqual(Array(5).fill(11))
    expect(values.slice(5, 16)).toEqual([10, 9, 8, 7, 6, 5, 4, 3, 2, 1, 1])
    expect(feedForward.source).toBe('local')
    run(feedForward, 0.07, 90)
    expect(feedForward.source).toBe('fallback')
    expect(feedForward.counters).toMatchObject({ held: 5, late: 0 })
  })

  it('comes back from fallback only after predictions have been there for the declared cycles in a row', () => {
    const feedForward = create()
    run(feedForward, 0, 200)
    feedForward.accept(horizon(0.2, 0.3, 11), 0.2, 0.2)
    run(feedForward, 0.2, 9)
    expect(feedForward.source).toBe('fallback')

    run(feedForward, 0.209, 1)
    expect(feedForward.source).toBe('horizon')
  })

  it('does not use a horizon after its expiry', () => {
    const feedForward = create()
    feedForward.accept(horizon(0, 1, 11, 0.03), 0, 0)
    run(feedForward, 0, 31)
    expect(feedForward.source).toBe('horizon')

    run(feedForward, 0.031, 1)
    expect(feedForward.source).toBe('held')
  })

  it('drops and counts a horizon that is over or holds a value that is not finite', () => {
    const feedForward = create()
    feedForward.accept(horizon(0, 1, 11), 2, 2)
    feedForward.accept(horizon(2, 3, NaN), 2, 2)
    feedForward.accept(horizon(2, 3, 11, 1.9), 2, 2)

    expect(feedForward.counters.late).toBe(3)
    expect(run(feedForward, 2, 20).every((value) => value === 1)).toBe(true)
  })

  it('lets a newer horizon replace the older for the same times', () => {
    const feedForward = create()
    feedForward.accept(horizon(0, 1, 3), 0, 0)
    run(feedForward, 0, 20)
    feedForward.accept(horizon(0.015, 0.5, 4), 0.02, 0.02)

    expect(run(feedForward, 0.02, 1)).toEqual([4])
  })
})

/** A repeatable stream of random numbers; the same seed gives the same numbers on every engine that has IEEE doubles. */
export interface Random {
  /** Uniform in [0, 1), 32 random bits. */
  uniform(): number
  /** Standard normal (mean 0, variance 1). */
  normal(): number
  /** Uniform integer in 0..below−1. */
  integer(below: number): number
  /** The numbers 0..count−1 in random order. */
  order(count: number): Uint32Array
}

/**
 * A seeded generator: mulberry32 for uniform numbers, Marsaglia's polar method for normal ones.
 *
 * @param seed  any integer; only its lower 32 bits count
 * Source: mulberry32 is Tommy Ettinger's public-domain generator; Marsaglia and Bray, SIAM Review 6 (1964) (from memory).
 */
export function createRandom(seed: number): Random {
  let state = seed >>> 0
  let spare: number | undefined

  function uniform(): number {
    state = (state + 0x6d2b79f5) >>> 0
    let mixed = Math.imul(state ^ (state >>> 15), state | 1)
    mixed ^= mixed + Math.imul(mixed ^ (mixed >>> 7), mixed | 61)
    return ((mixed ^ (mixed >>> 14)) >>> 0) / 4294967296
  }

  function normal(): number {
    if (spare !== undefined) {
      const value = spare
      spare = undefined
      return value
    }
    for (;;) {
      const a = 2 * uniform() - 1
      const b = 2 * uniform() - 1
      const square = a * a + b * b
      if (square === 0 || square >= 1) continue
      const scale = Math.sqrt((-2 * Math.log(square)) / square)
      spare = b * scale
      return a * scale
    }
  }

  function integer(below: number): number {
    return Math.floor(uniform() * below)
  }

  function order(count: number): Uint32Array {
    const numbers = Uint32Array.from({ length: count }, (_, index) => index)
    for (let last = count - 1; last > 0; last--) {
      const other = integer(last + 1)
      const kept = numbers[last]!
      numbers[last] = numbers[other]!
      numbers[other] = kept
    }
    return numbers
  }

  return { uniform, normal, integer, order }
}

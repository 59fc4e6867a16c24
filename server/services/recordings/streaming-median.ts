/** Bins per factor of e: a thousand of them resolve a period to a thousandth. */
const BINS_PER_E = 1000
const LEAST = 1e-6
const BINS = Math.ceil(BINS_PER_E * Math.log(1e9))

/**
 * Median of positive values in constant memory: counts in logarithmic bins, and the mean of what fell into the median's
 * bin. Equal values, as a steady clock gives, come out exactly to rounding.
 */
export function createMedian(): { add(value: number): void; value(): number } {
  const counts = new Uint32Array(BINS)
  const sums = new Float64Array(BINS)
  let total = 0
  return {
    add(value) {
      const bin = Math.min(BINS - 1, Math.max(0, Math.floor(BINS_PER_E * Math.log(value / LEAST))))
      counts[bin] += 1
      sums[bin] += value
      total += 1
    },
    value() {
      let below = 0
      for (let bin = 0; bin < BINS; bin++) {
        below += counts[bin]
        if (2 * below >= total && counts[bin] > 0) return sums[bin] / counts[bin]
      }
      return NaN
    },
  }
}

import type { CoverageStatistics } from './version.ts'
import { checkLength, ShapeError } from './shape-error.ts'

/** Least standard deviation a channel counts with (rad, rad/s, rad/s²), so that a joint held still can be whitened. */
const LEAST_STD = 1e-4

/** Share of the variance added to the diagonal, so that channels that depend on one another can be whitened. */
const RIDGE = 1e-6

/** Coverage statistics made ready for evaluation: the same numbers in typed arrays, with room to work in. */
export interface Coverage {
  readonly channels: number
  readonly low: Float64Array
  readonly high: Float64Array
  readonly mean: Float64Array
  readonly whitening: Float64Array
  readonly d99: number
  readonly centred: Float64Array
}

/**
 * Makes statistics ready for coverageOfRow.
 *
 * @param channels  3n
 * @throws {ShapeError} a list has another length than the channels call for
 */
export function prepareCoverage(statistics: CoverageStatistics, channels: number): Coverage {
  const { low, high, mean, whitening, d99 } = statistics
  for (const [name, list] of [
    ['low', low],
    ['high', high],
    ['mean', mean],
  ] as const) {
    checkLength(`coverage.${name}`, list.length, channels, `${channels} channels`)
  }
  checkLength('coverage.whitening', whitening.length, (channels * (channels + 1)) / 2, `lower triangle of ${channels} channels`)
  return {
    channels,
    low: Float64Array.from(low),
    high: Float64Array.from(high),
    mean: Float64Array.from(mean),
    whitening: Float64Array.from(whitening),
    d99,
    centred: new Float64Array(channels),
  }
}

/**
 * How well the fit's data cover one row: the share of its channels within the 0.5 to 99.5 percentiles, times
 * min(1, d99/d) with d its Mahalanobis distance. Below 0.5 counts as outside.
 *
 * @param row  [position, velocity, acceleration], length 3n, SI units
 * @returns 0 to 1
 * Source: Mahalanobis, On the generalised distance in statistics (1936), for d.
 */
export function coverageOfRow(coverage: Coverage, row: Float64Array): number {
  const { channels, low, high, mean, whitening, centred } = coverage
  let inside = 0
  for (let c = 0; c < channels; c++) {
    if (row[c] >= low[c] && row[c] <= high[c]) inside++
    centred[c] = row[c] - mean[c]
  }
  let squared = 0
  for (let i = 0, at = 0; i < channels; i++) {
    let sum = 0
    for (let j = 0; j <= i; j++) sum += whitening[at++] * centred[j]
    squared += sum * sum
  }
  const distance = Math.sqrt(squared)
  return (inside / channels) * (distance > coverage.d99 ? coverage.d99 / distance : 1)
}

/**
 * The statistics of a fit's data.
 *
 * Percentiles interpolate linearly between neighbours in order. The covariance counts no channel below LEAST_STD and gets
 * a ridge, so that it can be inverted when channels stand still or move together.
 *
 * @param data  count × channels, row-major: [position, velocity, acceleration], SI units
 * @throws {ShapeError} data is not count × channels, or count is below 2
 */
export function fitCoverage(data: Float64Array, count: number, channels: number): CoverageStatistics {
  if (count < 2) throw new ShapeError(`${count} rows are too few for coverage statistics, at least 2 are needed.`)
  checkLength('data', data.length, count * channels, `${count} rows of ${channels} channels`)
  const low: number[] = []
  const high: number[] = []
  const column = new Float64Array(count)
  for (let c = 0; c < channels; c++) {
    for (let i = 0; i < count; i++) column[i] = data[i * channels + c]
    column.sort()
    low.push(percentile(column, 0.005))
    high.push(percentile(column, 0.995))
  }
  const mean = meanOf(data, count, channels)
  const whitening = inverseCholesky(covarianceOf(data, count, channels, mean), channels)
  const coverage = prepareCoverage({ low, high, mean, whitening, d99: Infinity }, channels)
  const distances = new Float64Array(count)
  for (let i = 0; i < count; i++) distances[i] = distanceOfRow(coverage, data.subarray(i * channels, (i + 1) * channels))
  distances.sort()
  return { low, high, mean, whitening, d99: percentile(distances, 0.99) }
}

function distanceOfRow({ channels, mean, whitening }: Coverage, row: Float64Array): number {
  let squared = 0
  for (let i = 0, at = 0; i < channels; i++) {
    let sum = 0
    for (let j = 0; j <= i; j++) sum += whitening[at++] * (row[j] - mean[j])
    squared += sum * sum
  }
  return Math.sqrt(squared)
}

function percentile(sorted: Float64Array, share: number): number {
  const place = share * (sorted.length - 1)
  const below = Math.floor(place)
  const above = Math.min(below + 1, sorted.length - 1)
  return sorted[below] + (place - below) * (sorted[above] - sorted[below])
}

function meanOf(data: Float64Array, count: number, channels: number): number[] {
  const mean = new Array<number>(channels).fill(0)
  for (let i = 0, at = 0; i < count; i++) for (let c = 0; c < channels; c++) mean[c] += data[at++]
  return mean.map(sum => sum / count)
}

function covarianceOf(data: Float64Array, count: number, channels: number, mean: readonly number[]): Float64Array {
  const covariance = new Float64Array(channels * channels)
  for (let row = 0; row < count; row++) {
    const at = row * channels
    for (let i = 0; i < channels; i++) {
      const centred = data[at + i] - mean[i]
      for (let j = 0; j <= i; j++) covariance[i * channels + j] += centred * (data[at + j] - mean[j])
    }
  }
  for (let k = 0; k < covariance.length; k++) covariance[k] /= count
  for (let i = 0; i < channels; i++) {
    const variance = Math.max(covariance[i * channels + i], LEAST_STD * LEAST_STD)
    covariance[i * channels + i] = variance * (1 + RIDGE)
  }
  return covariance
}

/** Lower triangle, row by row, of L⁻¹ with covariance = L Lᵀ. */
function inverseCholesky(covariance: Float64Array, size: number): number[] {
  const factor = new Float64Array(size * size)
  for (let i = 0; i < size; i++) {
    for (let j = 0; j <= i; j++) {
      let sum = covariance[i * size + j]
      for (let k = 0; k < j; k++) sum -= factor[i * size + k] * factor[j * size + k]
      factor[i * size + j] = i === j ? Math.sqrt(Math.max(sum, LEAST_STD * LEAST_STD * RIDGE)) : sum / factor[j * size + j]
    }
  }
  const inverse = new Float64Array(size * size)
  for (let j = 0; j < size; j++) {
    inverse[j * size + j] = 1 / factor[j * size + j]
    for (let i = j + 1; i < size; i++) {
      let sum = 0
      for (let k = j; k < i; k++) sum -= factor[i * size + k] * inverse[k * size + j]
      inverse[i * size + j] = sum / factor[i * size + i]
    }
  }
  const triangle: number[] = []
  for (let i = 0; i < size; i++) for (let j = 0; j <= i; j++) triangle.push(inverse[i * size + j])
  return triangle
}

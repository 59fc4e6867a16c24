import { exp } from '../elementary.ts'
import type { LinearMotion } from './linear-motion.ts'
import type { LinearUpdate } from './update.ts'

/** Errors along one motion or several: mean squared, base standard deviations, averaged over joints. */
export interface LinearErrors {
  /** Every batch predicted with what was known before it (prequential). */
  readonly nextBatch: number
  /** With what was known about 0.4 s and 1 s before. */
  readonly stale04: number
  readonly stale1: number
  /** As stale1, without the first two seconds. */
  readonly after2sStale1: number
  /** Adapted on the first half, tested on the second. */
  readonly frozen: number
}

/** Lags at which predictions are measured, s. */
export const LAGS = [0, 0.4, 1] as const

const SETTLED = 2

/** Lag in whole steps, rounded down: a batch is on average half a batch younger than its newest row. */
export function stepsOfLag(lag: number, rowsPerStep: number, period: number): number {
  return Math.floor(lag / (rowsPerStep * period) + 1e-9)
}

/** Mean sample period, s. */
export function periodOf(motion: { readonly time: Float64Array; readonly rows: number }): number {
  return (motion.time[motion.rows - 1] - motion.time[0]) / Math.max(motion.rows - 1, 1)
}

/**
 * Adapts along a motion in batches and measures. Rows that do not fill a batch at the end are left out of the lags.
 *
 * Source: prequential error, Dawid 1984 (from memory).
 */
export function measureLinear(update: LinearUpdate, motion: LinearMotion): LinearErrors {
  const { size, joints, rowsPerStep, decay } = update
  const { rows, time } = motion
  const lags = LAGS.map(lag => stepsOfLag(lag, rowsPerStep, periodOf(motion)))
  const steps = Math.floor(rows / rowsPerStep)
  const state = update.initial()
  const history: Float64Array[] = [state.values.slice()]
  const asOf = [time[0]]
  const half = Math.floor(steps / 2)
  for (let i = 0; i < steps; i++) {
    update.step(state, motion, i * rowsPerStep, (i + 1) * rowsPerStep)
    history.push(state.values.slice())
    asOf.push(state.asOf)
  }
  const sums = lags.map(() => 0)
  let settled = 0
  let settledRows = 0
  let frozen = 0
  for (let i = 0; i < steps; i++) {
    const from = i * rowsPerStep
    const error = (at: number) => squares(motion, history[at], asOf[at], decay, size, joints, from, from + rowsPerStep)
    lags.forEach((lag, index) => { sums[index] += error(Math.max(i - lag, 0)) })
    if (time[i * rowsPerStep] - time[0] >= SETTLED) {
      settled += error(Math.max(i - lags[2], 0))
      settledRows += rowsPerStep
    }
    if (i >= half) frozen += error(half)
  }
  const mean = (sum: number, count: number) => sum / (count * joints)
  return {
    nextBatch: mean(sums[0], steps * rowsPerStep),
    stale04: mean(sums[1], steps * rowsPerStep),
    stale1: mean(sums[2], steps * rowsPerStep),
    after2sStale1: mean(settled, settledRows),
    frozen: mean(frozen, (steps - half) * rowsPerStep),
  }
}

/** Means of several motions' errors. */
export function meanErrors(all: readonly LinearErrors[]): LinearErrors {
  const mean = (of: (errors: LinearErrors) => number) => all.reduce((sum, errors) => sum + of(errors) / all.length, 0)
  return {
    nextBatch: mean(errors => errors.nextBatch),
    stale04: mean(errors => errors.stale04),
    stale1: mean(errors => errors.stale1),
    after2sStale1: mean(errors => errors.after2sStale1),
    frozen: mean(errors => errors.frozen),
  }
}

/** Sum of squared errors of rows, predicted with values that were right at asOf. */
export function squares(
  { time, residual, basis }: LinearMotion, values: Float64Array, asOf: number, decay: number, size: number, joints: number,
  from: number, to: number,
): number {
  let sum = 0
  for (let row = from, k = from * joints; row < to; row++) {
    const left = exp(-decay * Math.max(time[row] - asOf, 0))
    for (let j = 0; j < joints; j++, k++) {
      let e = residual[k] - left * values[size + j]
      for (let c = 0; c < size; c++) e -= basis[k * size + c] * values[c]
      sum += e * e
    }
  }
  return sum
}

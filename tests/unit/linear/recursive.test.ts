import { describe, expect, test } from 'vitest'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { createRecursiveUpdate } from '../../../shared/dynamics/linear/recursive.ts'
import { stepThrough, type LinearState } from '../../../shared/dynamics/linear/update.ts'
import { ShapeError } from '../../../shared/dynamics/shape-error.ts'
import { constants, joints, motionOf, noise, size } from './example.ts'

const d = size + joints
const z = [0.8, -1.2, 0.5]

/** Textbook filter in matrix form: all scalars of a step at once, P ← (1 − K H) P, by Gauss elimination. */
function textbookStep(values: number[], p: number[][], h: number[][], y: number[], r: number[]) {
  const m = y.length
  const ph = p.map(row => h.map(line => line.reduce((sum, value, k) => sum + value * row[k], 0)))
  const s = h.map((line, a) => h.map((_, b) => line.reduce((sum, value, k) => sum + value * ph[k][b], a === b ? r[a] : 0)))
  const e = y.map((value, a) => value - h[a].reduce((sum, factor, k) => sum + factor * values[k], 0))
  const solve = (right: number[]): number[] => {
    const a = s.map((row, k) => [...row, right[k]])
    for (let c = 0; c < m; c++) {
      for (let row = c + 1; row < m; row++) {
        const factor = a[row][c] / a[c][c]
        for (let k = c; k <= m; k++) a[row][k] -= factor * a[c][k]
      }
    }
    const x = new Array<number>(m).fill(0)
    for (let row = m - 1; row >= 0; row--) {
      const known = x.reduce((sum, value, k) => (k > row ? sum + a[row][k] * value : sum), 0)
      x[row] = (a[row][m] - known) / a[row][row]
    }
    return x
  }
  const solvedE = solve(e)
  const solvedH = ph.map(row => solve(row))
  return {
    values: values.map((value, k) => value + ph[k].reduce((sum, factor, a) => sum + factor * solvedE[a], 0)),
    p: p.map((row, i) => row.map((value, j) => value - ph[j].reduce((sum, factor, a) => sum + factor * solvedH[i][a], 0))),
  }
}

function matrixOf({ covariance }: LinearState): number[][] {
  return Array.from({ length: d }, (_, r) => Array.from(covariance.subarray(r * d, (r + 1) * d)))
}

describe('the recursive update', () => {
  const update = createRecursiveUpdate(constants, size, joints)

  test('takes a batch in as the textbook filter does in one piece', () => {
    const motion = motionOf(4, 1, () => z)
    const state = update.initial()
    const before = matrixOf(state)
    const h = Array.from({ length: 4 * joints }, (_, k) => [
      ...motion.basis.subarray(k * size, (k + 1) * size),
      ...Array.from({ length: joints }, (__, j) => (k % joints === j ? 1 : 0)),
    ])
    const r = new Array<number>(4 * joints).fill(noise ** 2)
    // At the first batch the surprise opens the gate: with a threshold out of reach only the filter itself is compared.
    const calm = createRecursiveUpdate({ ...constants, threshold: 1e9 }, size, joints)

    calm.step(state, motion, 0, 4)
    const want = textbookStep(new Array<number>(d).fill(0), before, h, Array.from(motion.residual), r)

    // Both round some hundred operations on numbers near 1; the smallest variance is about 1e-3.
    want.values.forEach((value, k) => expect(state.values[k]).toBeCloseTo(value, 11))
    want.p.forEach((row, r) => row.forEach((value, c) => expect(state.covariance[r * d + c]).toBeCloseTo(value, 11)))
  })

  test('finds a constant payload within its own standard deviations', () => {
    const motion = motionOf(400, 2, () => z)
    const state = update.initial()

    stepThrough(update, state, motion, 0, 400)

    z.forEach((value, c) => {
      const deviation = Math.sqrt(state.covariance[c * d + c])
      expect(deviation).toBeLessThan(0.05)
      expect(Math.abs(state.values[c] - value)).toBeLessThan(4 * deviation)
    })
  })

  test('keeps its covariance symmetric to the bit, positive definite and finite over long and idle motions', () => {
    const idle = motionOf(4000, 3, () => z)
    idle.basis.fill(0, 400 * joints * size)
    const state = update.initial()
    const random = createRandom(5)

    for (let row = 0; row < 4000; row += 40) {
      stepThrough(update, state, idle, row, row + 40)
      const p = matrixOf(state)
      for (let r = 0; r < d; r++) for (let c = 0; c < r; c++) expect(p[r][c]).toBe(p[c][r])
      const v = Array.from({ length: d }, () => random.normal())
      const quadratic = v.reduce((sum, a, r) => sum + v.reduce((inner, b, c) => inner + a * b * p[r][c], 0), 0)
      expect(quadratic).toBeGreaterThan(0)
    }
    expect(update.isFinite(state)).toBe(true)
  })

  test('bounds its covariance when nothing is measured for days', () => {
    const state = update.initial()
    stepThrough(update, state, motionOf(4, 4, () => z), 0, 4)

    for (let day = 1; day <= 10; day++) update.letPass(state, 86400 * day)

    const initial = update.initial().covariance
    for (let k = 0; k < d; k++) expect(state.covariance[k * d + k]).toBeLessThanOrEqual(100 * initial[k * d + k] * (1 + 1e-12))
    expect(state.values.slice(size)).toEqual(new Float64Array(joints))
  })

  test('lets the bias fade by e^−κ a second and leaves z alone while time passes', () => {
    const state = update.initial()
    stepThrough(update, state, motionOf(40, 5, () => z), 0, 40)
    const before = state.values.slice()

    update.letPass(state, state.asOf + 2)

    expect(Array.from(state.values.slice(0, size))).toEqual(Array.from(before.slice(0, size)))
    for (let k = size; k < d; k++) expect(state.values[k]).toBeCloseTo(before[k] * Math.exp(-1), 12)
  })

  test('never lets time run back', () => {
    const state = update.initial()
    update.letPass(state, 5)
    const before = state.covariance.slice()

    update.letPass(state, 4)

    expect(state.asOf).toBe(5)
    expect(state.covariance).toEqual(before)
  })

  test('opens the gate when the payload is gripped, and then finds it several times faster than without', () => {
    const motion = motionOf(420, 6, row => (row < 400 ? [0, 0, 0] : z))
    const steady = { ...constants, driftOfState: [1e-6, 1e-6, 1e-6] }
    const gated = createRecursiveUpdate(steady, size, joints)
    const closed = createRecursiveUpdate({ ...steady, threshold: 1e9 }, size, joints)
    const errorOf = (one: typeof gated) => {
      const state = one.initial()
      stepThrough(one, state, motion, 0, 420)
      return Math.hypot(...z.map((value, c) => state.values[c] - value))
    }

    expect(errorOf(gated)).toBeLessThan(0.2 * errorOf(closed))
  })

  test('opens the gate for a declared event before anything is measured', () => {
    const motion = motionOf(404, 7, () => [0, 0, 0])
    const state = update.initial()
    stepThrough(update, state, motion, 0, 400)
    const other = update.initial()
    update.copy(state, other)

    update.open(other)
    update.step(state, motion, 400, 404)
    update.step(other, motion, 400, 404)

    for (let c = 0; c < size; c++) expect(other.covariance[c * d + c]).toBeGreaterThan(2 * state.covariance[c * d + c])
    expect(other.opening).toBe(false)
  })

  test('takes batches of any number of rows, the last group being what is left', () => {
    for (const rows of [1, 3, 7, 50]) {
      const motion = motionOf(rows, 8, () => z)
      const state = update.initial()

      stepThrough(update, state, motion, 0, rows)

      expect(update.isFinite(state)).toBe(true)
      expect(state.asOf).toBe(motion.time[rows - 1])
    }
  })

  test.each([
    [{ noise: [0.1] }, /noise has 1 values, expected 2/],
    [{ noise: [0.1, 0] }, /noise: value 1 is 0/],
    [{ driftOfState: [0.1, -1, 0] }, /driftOfState: value 1 is -1/],
    [{ decay: NaN }, /decay: value 0 is NaN/],
  ])('refuses constants that do not fit: %j', (wrong, message) => {
    expect(() => createRecursiveUpdate({ ...constants, ...wrong }, size, joints)).toThrow(ShapeError)
    expect(() => createRecursiveUpdate({ ...constants, ...wrong }, size, joints)).toThrow(message)
  })
})

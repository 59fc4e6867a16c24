import { expect, test } from 'vitest'
import { exp, logistic, softplus, tanh } from '../../../shared/dynamics/elementary.ts'

// The engine's own functions are within one unit in the last place (2.2e-16); ours within a few.
const tolerance = 2e-15

const values = Array.from({ length: 6001 }, (_, k) => (k - 3000) / 100 + 1e-4 * (k % 7))

test.each([
  { name: 'exp', own: exp, engine: Math.exp },
  { name: 'tanh', own: tanh, engine: Math.tanh },
  { name: 'softplus', own: softplus, engine: (x: number) => Math.max(x, 0) + Math.log1p(Math.exp(-Math.abs(x))) },
  { name: 'logistic', own: logistic, engine: (x: number) => 1 / (1 + Math.exp(-x)) },
])('$name agrees with the engine from −30 to 30', ({ own, engine }) => {
  for (const x of values) expect(Math.abs(own(x) - engine(x))).toBeLessThanOrEqual(tolerance * Math.abs(engine(x)))
})

test('the ends neither overflow nor turn into something else', () => {
  expect(exp(1000)).toBe(Infinity)
  expect(exp(-1000)).toBe(0)
  expect(exp(NaN)).toBeNaN()
  expect(tanh(1000)).toBe(1)
  expect(tanh(-1000)).toBe(-1)
  expect(softplus(1000)).toBe(1000)
  expect(softplus(-1000)).toBe(0)
  expect(logistic(-1000)).toBe(0)
})

import { expect, it } from 'vitest'
import { errorScale, linearScale, logScale, roundTicks } from '../../../console/components/plot/scale.ts'

it('a linear scale puts its ends where they belong', () => {
  const scale = linearScale(0, 10, 100, 0)

  expect([0, 5, 10].map(scale.place)).toEqual([100, 50, 0])
})

it('a log scale gives each decade the same length, and values at or below 0 the lower edge', () => {
  const scale = logScale(0.01, 100, 400, 0)

  expect([0.01, 0.1, 1, 100].map((value) => Math.round(scale.place(value)))).toEqual([400, 300, 200, 0])
  expect(scale.place(0)).toBe(400)
  expect(scale.ticks).toEqual([0.01, 0.1, 1, 10, 100])
})

it('errors go on a log axis only where they span more than a decade', () => {
  expect(errorScale([1, 2, 5], 100, 0).kind).toBe('linear')
  expect(errorScale([0.01, 2, 5], 100, 0).kind).toBe('log')
  expect(errorScale([], 100, 0).kind).toBe('linear')
  expect(errorScale([0, 0], 100, 0).kind).toBe('linear')
})

it('ticks are round numbers within the range', () => {
  expect(roundTicks(0, 1, 5)).toEqual([0, 0.2, 0.4, 0.6, 0.8, 1])
  expect(roundTicks(3, 3, 5)).toEqual([3])
})

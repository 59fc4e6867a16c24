import { expect, test } from 'vitest'
import { fitNormalisation, normaliseMotion, type Motion } from '../../../shared/dynamics/motion.ts'

/** One joint, two rows. */
const motion: Motion = {
  name: 'short',
  rows: 2,
  time: Float64Array.of(0, 0.02),
  states: Float64Array.of(1, 0.1, 0.2, 3, 0.3, 0.4),
  torque: Float64Array.of(4, 8),
}

test('velocity and acceleration are scaled by at least 0.5 rad/s and 1.5 rad/s²', () => {
  const { inputMean, inputStd, outputMean, outputStd } = fitNormalisation([motion], 1)

  expect(inputMean).toEqual([2, 0.2, 0.30000000000000004])
  expect(inputStd).toEqual([1, 0.5, 1.5])
  expect(outputMean).toEqual([6])
  expect(outputStd).toEqual([2])
})

test('a motion is normalised channel by channel', () => {
  const normalised = normaliseMotion(motion, fitNormalisation([motion], 1))

  expect([...normalised.measured]).toEqual([-1, 1])
  expect(normalised.x[0]).toBe(-1)
  expect(normalised.x[4]).toBeCloseTo(0.2, 12)
})

test('a joint that never feels torque divides by a thousandth, not by zero', () => {
  const still = { ...motion, torque: new Float64Array(2) }

  expect(fitNormalisation([still], 1).outputStd).toEqual([1e-3])
})

test('columns of another arm are refused by name', () => {
  const other = { ...motion, torque: new Float64Array(4) }

  expect(() => normaliseMotion(other, fitNormalisation([motion], 1))).toThrow('short: torque has 4 values, expected 2')
})

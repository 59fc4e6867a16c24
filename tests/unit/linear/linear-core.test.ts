import { describe, expect, test } from 'vitest'
import { createRandom } from '../../../shared/dynamics/random.ts'
import type { Basis } from '../../../shared/dynamics/linear/basis.ts'
import { createLinearCore } from '../../../shared/dynamics/linear/linear-core.ts'
import { measureLinear } from '../../../shared/dynamics/linear/measure.ts'
import { prepareMotion } from '../../../shared/dynamics/linear/linear-motion.ts'
import { createRecursiveUpdate } from '../../../shared/dynamics/linear/recursive.ts'
import { constants, joints, size } from './example.ts'

const rows = 200
const channels = 3 * joints
const random = createRandom(11)
const states = Float64Array.from({ length: rows * channels }, () => random.normal())
const time = Float64Array.from({ length: rows }, (_, row) => 3 + 0.02 * row)

/** Column c is the state's channel c, plus the joint's number. */
const basis: Basis = {
  size, joints,
  evaluate(given, count, out) {
    for (let k = 0; k < count * joints; k++) {
      for (let c = 0; c < size; c++) out[k * size + c] = given[Math.floor(k / joints) * channels + c] + (k % joints)
    }
  },
}
const base = { evaluate: (given: Float64Array, count: number, torque: Float64Array) => {
  for (let k = 0; k < count * joints; k++) torque[k] = 4 * given[Math.floor(k / joints) * channels + 5]
} }
const normalisation = {
  inputMean: new Array<number>(channels).fill(0.1), inputStd: new Array<number>(channels).fill(2),
  outputMean: [0.5, -0.5], outputStd: [3, 2],
}
const table = new Float64Array(rows * joints * size)
basis.evaluate(states, rows, table)
const torque = new Float64Array(rows * joints)
base.evaluate(states, rows, torque)
for (let k = 0; k < torque.length; k++) {
  const learned = 0.7 * table[k * size] - 0.3 * table[k * size + 1] + table[k * size + 2] + 0.1 * random.normal()
  torque[k] += normalisation.outputStd[k % joints] * learned
}
const motion = { name: 'example', rows, time, states, torque }
const make = () => createLinearCore({
  base, basis, update: createRecursiveUpdate(constants, size, joints), normalisation,
  referenceStates: [Array.from(states.subarray(0, channels)), Array.from(states.subarray(channels, 2 * channels))],
})
const batch = (row: number, count: number) => ({
  rows: count, time: time.slice(row, row + count), states: states.slice(row * channels, (row + count) * channels),
  torque: torque.slice(row * joints, (row + count) * joints),
})

describe('a linear core', () => {
  test('fed batch by batch makes the same next-batch error as the measure on the whole motion', () => {
    const core = make()
    const out = new Float64Array(4 * joints)
    let state = core.initial()
    let sum = 0
    for (let row = 0; row < rows; row += 4) {
      core.load(batch(row, 4))
      core.predict(state, 0, 4, out)
      for (let k = 0; k < out.length; k++) sum += (core.measured[k] - out[k]) ** 2
      const next = core.initial()
      core.learn(state, 4, next)
      state = next
    }

    const prepared = prepareMotion(motion, base, basis, normalisation, { unloaded: false, changes: [] })
    const { nextBatch } = measureLinear(createRecursiveUpdate(constants, size, joints), prepared)
    // The residual is formed in two orders of rounding.
    expect(sum / (rows * joints)).toBeCloseTo(nextBatch, 12)
  })

  test('goes on to the same bits from a state that was written and read', () => {
    const core = make()
    const state = core.initial()
    core.load(batch(0, 50))
    core.learn(core.initial(), 50, state)
    core.open(state)
    const numbers = new Float64Array(core.stateLength)
    core.write(state, numbers)
    const other = make()
    const read = other.initial()
    other.read(numbers, read)

    for (const [one, from] of [[core, state], [other, read]] as const) {
      one.load(batch(50, 7))
      const into = one.initial()
      one.learn(from, 7, into)
      one.write(into, numbers)
      ;(from as { result?: Float64Array }).result = numbers.slice()
    }

    expect((read as { result?: Float64Array }).result).toEqual((state as { result?: Float64Array }).result)
  })

  test('predicts ahead what it predicts for rows of that time', () => {
    const core = make()
    const state = core.initial()
    core.load(batch(0, 40))
    core.learn(core.initial(), 40, state)
    const later = batch(100, 3)
    const out = new Float64Array(3 * joints)
    core.load(later)
    core.predict(state, 0, 3, out)
    const ahead = later.time.map(value => value - state.asOf)
    const served = new Float64Array(3 * joints)
    base.evaluate(later.states, 3, served)

    core.addAhead(state, later.states, 3, ahead, served)

    served.forEach((value, k) => {
      expect((value - normalisation.outputMean[k % joints]) / normalisation.outputStd[k % joints]).toBeCloseTo(out[k], 12)
    })
  })

  test('says the base alone without a state, and on reference states before anything is learned', () => {
    const core = make()
    const out = new Float64Array(2 * joints)
    core.load(batch(0, 2))
    core.predict(null, 0, 2, out)

    const reference = new Float64Array(2 * joints)
    core.reference(core.initial(), reference)

    expect(Array.from(reference)).toEqual(Array.from(out))
    expect(Array.from(core.baseReference)).toEqual(Array.from(out))
  })

  test('lets time alone pass for a batch that is not learned from', () => {
    const core = make()
    const state = core.initial()
    core.load(batch(0, 40))
    core.learn(core.initial(), 40, state)
    const before = { values: state.values.slice(), covariance: state.covariance.slice() }

    core.age(state, state.asOf + 1)

    expect(Array.from(state.values.subarray(0, size))).toEqual(Array.from(before.values.subarray(0, size)))
    for (let k = size; k < size + joints; k++) expect(Math.abs(state.values[k])).toBeLessThan(Math.abs(before.values[k]))
    for (let c = 0; c < size; c++) {
      const at = c * (size + joints) + c
      expect(state.covariance[at]).toBeGreaterThan(before.covariance[at])
    }
  })
})

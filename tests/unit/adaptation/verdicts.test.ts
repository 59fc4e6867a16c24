import { describe, expect, test } from 'vitest'
import { createAdaptation, type RequestedSettings } from '../../../shared/dynamics/index.ts'
import { batch, codesOf, inputsOf, kernels, lossOf, predictAdapted, predictBase, send } from './two-joint-arm.ts'

const gentle: RequestedSettings = { scheme: 'all', update: { kind: 'sgd', rate: 0.02 } }
const biasOnly: RequestedSettings = { scheme: 'bias', update: { kind: 'sgd', rate: 0.5, fade: 0.9 } }

describe('an accepted batch', () => {
  test('is served as the next revision and leaves less error on its rows', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))

    const outcome = send(adaptation, batch(1))

    expect(outcome).toMatchObject({ verdict: 'accepted', revision: 1, reasons: [], changedTo: null })
    expect(outcome.after!).toBeLessThan(outcome.before)
    expect(outcome.stepNorm!).toBeGreaterThan(0)
    expect(Array.from(outcome.weights)).toEqual([1, 1])
    expect(adaptation.status()).toMatchObject({ revision: 1, nextSequence: 2, asOf: 0.06, validUntil: 0.56, rejectionsInARow: 0 })
  })

  test('states its errors in base standard deviations and per joint in N·m', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    const offset = (row: number, joint: number) => (joint === 0 ? 0.5 : row === 0 ? 1 : 0)

    const { before, jointBefore } = send(adaptation, batch(1, { offset }))

    // By hand: joint 1 is off by 0.5 σ in all four rows, joint 2 by 1 σ in one; σ is 2 N·m and 0.5 N·m. f32 predicts to 1e-6.
    expect(before).toBeCloseTo((0.25 + 0.25) / 2, 5)
    expect(jointBefore[0]).toBeCloseTo(1, 5)
    expect(jointBefore[1]).toBeCloseTo(0.25, 5)
  })

  test('answers the mean weights of its loss', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle, lossOf('structured', 'all')))

    const { weights } = send(adaptation, batch(1))

    for (const [j, parameter] of lossOf('structured', 'all').parameters.entries()) {
      expect(weights[j]).toBeCloseTo(Math.exp(parameter), 5)
    }
  })
})

describe('a batch is stored, and nothing is learned,', () => {
  test('when the adaptation is frozen', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    adaptation.prepare({ kind: 'command', command: 'freeze', reason: 'Looks odd.' })
    adaptation.publish()

    const outcome = send(adaptation, batch(1))

    expect(outcome).toMatchObject({ verdict: 'stored', revision: 0, after: null, stepNorm: null })
    expect(codesOf(outcome)).toEqual(['frozen'])
    expect(outcome.reasons[0].detail).toContain('Looks odd.')
    expect(adaptation.status().nextSequence).toBe(2)
  })

  test('when its rows come more than five periods after the newest in the log', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    send(adaptation, batch(1))

    const late = send(adaptation, batch(2, { from: 0.06 + 0.11 }))
    const inTime = send(adaptation, batch(3, { from: 0.06 + 0.11 + 0.06 + 0.09 }))

    expect(codesOf(late)).toEqual(['gap'])
    expect(late.reasons[0].found).toBeCloseTo(0.11, 9)
    expect(late.reasons[0].bound).toBeCloseTo(0.1, 9)
    expect(inTime.verdict).toBe('accepted')
  })

  test('when there is a gap between its own rows', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    const entry = batch(1)
    entry.time[3] += 0.1

    expect(codesOf(send(adaptation, entry))).toEqual(['gap'])
  })

  test('when single rows pause for more than five of the periods before', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    for (let k = 0; k < 20; k++) send(adaptation, batch(k + 1, { rows: 1, from: k * 0.02 }))

    expect(codesOf(send(adaptation, batch(21, { rows: 1, from: 19 * 0.02 + 0.11 })))).toEqual(['gap'])
    expect(codesOf(send(adaptation, batch(22, { rows: 1, from: 19 * 0.02 + 0.13 })))).toEqual([])
  })

  test('when no joint moved over the last second, except for a bias', () => {
    const network = createAdaptation(kernels, inputsOf(gentle))
    const bias = createAdaptation(kernels, inputsOf(biasOnly))

    expect(codesOf(send(network, batch(1, { amplitude: 0 })))).toEqual(['excitation'])
    expect(send(bias, batch(1, { amplitude: 0 })).verdict).toBe('accepted')
  })

  test('when only the newest rows rest, it still learns', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    send(adaptation, batch(1))

    expect(send(adaptation, batch(2, { amplitude: 0 })).verdict).toBe('accepted')
  })

  test('when its error is below the noise', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))

    expect(codesOf(send(adaptation, batch(1, { offset: () => 0.009 })))).toEqual(['below_noise'])
    expect(send(adaptation, batch(2, { offset: () => 0.011 })).verdict).toBe('accepted')
  })
})

describe('a step is rejected, and the served state stays,', () => {
  test('when numbers overflow', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    const entry = batch(1)
    entry.torque[0] = 1e300

    const outcome = send(adaptation, entry)

    expect(outcome).toMatchObject({ verdict: 'rejected', revision: 0, before: Number.MAX_VALUE })
    expect(codesOf(outcome)).toEqual(['not_finite'])
    expect(predictAdapted(adaptation, batch(1))).toEqual(predictBase(batch(1)).torque)
  })

  test('when one measured torque lies beyond what the joint can bear', () => {
    const adaptation = createAdaptation(kernels, inputsOf({ scheme: 'all', update: { kind: 'adam' } }))
    const entry = batch(1)
    entry.torque[5] = 1e6

    const outcome = send(adaptation, entry)

    expect(codesOf(outcome)).toEqual(['implausible'])
    expect(outcome.reasons[0]).toMatchObject({ joint: 1, bound: 0.75 * 25 })
    expect(outcome.reasons[0].detail).toContain('lift')
  })

  test('when measured torque has the opposite sign', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    const entry = batch(1, { offset: () => 0 })
    entry.torque.forEach((torque, k) => {
      entry.torque[k] = -torque
    })

    const outcome = send(adaptation, entry)

    expect(codesOf(outcome)).toEqual(['implausible'])
    expect(outcome.reasons[0].detail).toContain('sign convention')
  })

  test('when its norm is beyond the bound, unless a grip or a release was less than a second ago', () => {
    const adaptation = createAdaptation(kernels, inputsOf({ ...gentle, guard: { stepNorm: 0.001 } }))
    const first = send(adaptation, batch(1))
    adaptation.prepare({ kind: 'event', sequence: 2, skipped: 0, time: 0.07, event: 'gripped' })
    adaptation.publish()

    const within = send(adaptation, batch(3, { from: 0.08 }))
    for (let k = 4; k <= 14; k++) send(adaptation, batch(k, { from: (k - 2) * 0.08 }))
    const after = send(adaptation, batch(15, { from: 1.08 }))

    expect(codesOf(first)).toEqual(['step_norm'])
    expect(first.reasons[0]).toMatchObject({ found: first.stepNorm, bound: 0.001 })
    expect(within.verdict).toBe('accepted')
    expect(codesOf(after)).toEqual(['step_norm'])
  })

  test('when it changes the torque on a reference state too much, grip or not', () => {
    const adaptation = createAdaptation(kernels, inputsOf({ ...biasOnly, guard: { torqueChange: 0.001 } }))
    adaptation.prepare({ kind: 'event', sequence: 1, skipped: 0, time: 0, event: 'gripped' })
    adaptation.publish()

    const outcome = send(adaptation, batch(2, { from: 0 }))

    // By hand: mean slope −2/2 · 0.5 σ, rate 0.5: b = 0.25 σ, that is 0.5 N·m and 0.125 N·m; bounds 0.1 and 0.025 N·m.
    expect(codesOf(outcome)).toEqual(['torque_change'])
    expect(outcome.reasons[0].bound).toBeCloseTo(outcome.reasons[0].joint === 0 ? 0.1 : 0.025, 9)
    expect(outcome.reasons[0].found).toBeCloseTo(outcome.reasons[0].joint === 0 ? 0.5 : 0.125, 5)
  })

  test('when it drifts too far from base, though each step is small', () => {
    const adaptation = createAdaptation(kernels, inputsOf({ ...biasOnly, guard: { drift: 0.015 } }))
    const outcomes = [1, 2, 3, 4, 5, 6].map(sequence => send(adaptation, batch(sequence, { offset: () => 1 })))

    // Bounds 1.5 N·m = 0.75 σ on both joints: the offset of 1 σ is approached by halves, 0.5 σ, then 0.75 σ less what faded.
    const rejected = outcomes.filter(({ verdict }) => verdict === 'rejected')
    expect(outcomes[0].verdict).toBe('accepted')
    expect(rejected.length).toBeGreaterThan(0)
    for (const outcome of rejected) expect(codesOf(outcome)).toEqual(['drift'])
  })

  test('when it does not help on the newest quarter of a large batch', () => {
    const adaptation = createAdaptation(kernels, inputsOf(biasOnly))
    const turning = (row: number) => (row < 24 ? 1 : -1)

    const outcome = send(adaptation, batch(1, { rows: 32, offset: turning }))
    const helping = send(adaptation, batch(2, { rows: 32, from: 0.64, offset: () => 1 }))

    expect(outcome).toMatchObject({ verdict: 'rejected', revision: 0 })
    expect(codesOf(outcome)).toContain('no_help')
    expect(outcome.stepNorm!).toBeGreaterThan(0)
    expect(helping).toMatchObject({ verdict: 'accepted', revision: 1 })
  })

  test('of 31 rows is not held out: it is judged by the batches after it', () => {
    const adaptation = createAdaptation(kernels, inputsOf(biasOnly))

    expect(send(adaptation, batch(1, { rows: 31, offset: row => (row < 24 ? 1 : -1) })).verdict).toBe('accepted')
  })
})

describe('a served state that turns worse than base', () => {
  const slow: RequestedSettings = { scheme: 'bias', update: { kind: 'sgd', rate: 0.05, fade: 1 }, guard: { toleranceFloor: 0.2 } }

  test('is replaced by the last good one as a new revision, or by base when that is worse too', () => {
    const adaptation = createAdaptation(kernels, inputsOf(slow))
    const load = (_row: number, _joint: number, time: number) => (time < 8 ? 1 : 0)
    const outcomes = Array.from({ length: 125 }, (_, k) => send(adaptation, batch(k + 1, { offset: load })))

    const tripped = outcomes.find(({ verdict }) => verdict === 'rejected')!
    const before = outcomes[tripped.sequence - 2]

    expect(codesOf(tripped)).toEqual(['worse_than_base'])
    expect(tripped.revision).toBe(before.revision + 1)
    expect(tripped.sequence).toBeGreaterThan(100)
    expect(tripped.reasons[0].found!).toBeGreaterThan(tripped.reasons[0].bound!)
    // The batch after it starts from base: its error is that of base, none.
    expect(outcomes[tripped.sequence].before).toBeLessThan(1e-9)
  })

  test.each([
    ['implausible', 1e3, {}],
    ['step_norm', 6, { stepNorm: 0.2 }],
  ])('is found out all the same when a batch is rejected as %s within that second', (code, offset, guard) => {
    const adaptation = createAdaptation(kernels, inputsOf({ ...slow, guard: { ...slow.guard, ...guard } }))
    const spikeAt = 103
    const outcomes = Array.from({ length: 112 }, (_, k) =>
      send(adaptation, batch(k + 1, { offset: (_row, _joint, time) => (k + 1 === spikeAt ? offset : time < 8 ? 1 : 0) })),
    )

    expect(codesOf(outcomes[spikeAt - 1])).toEqual([code])
    expect(outcomes.slice(spikeAt).flatMap(codesOf)).toContain('worse_than_base')
  })

  test('is left alone when it has recovered by the time it is judged', () => {
    const adaptation = createAdaptation(kernels, inputsOf({ ...slow, update: { ...slow.update, rate: 0.5 } }))
    for (let k = 1; k <= 30; k++) send(adaptation, batch(k, { offset: () => 1 }))
    adaptation.prepare({ kind: 'event', sequence: 31, skipped: 0, time: 2.39, event: 'released' })
    adaptation.publish()

    const outcomes = Array.from({ length: 20 }, (_, k) =>
      send(adaptation, batch(32 + k, { from: (30 + k) * 0.08, offset: () => -0.05 })),
    )

    expect(outcomes.flatMap(codesOf)).not.toContain('worse_than_base')
    expect(outcomes[0].before).toBeGreaterThan(0.9)
  })

  test('is not judged before a whole second has been seen', () => {
    const adaptation = createAdaptation(kernels, inputsOf(slow))
    const alternating = (_row: number, _joint: number, time: number) => (Math.floor((time + 1e-9) / 0.08) % 2 === 0 ? 0.8 : -0.8)

    const verdicts = Array.from({ length: 12 }, (_, k) => send(adaptation, batch(k + 1, { offset: alternating })).verdict)

    expect(verdicts).toEqual(new Array(12).fill('accepted'))
  })
})

describe('a streak of rejections', () => {
  test('freezes the adaptation, which then serves its last good state', () => {
    const adaptation = createAdaptation(kernels, inputsOf({ ...gentle, guard: { rejectionsBeforeFreeze: 3 } }))
    const spike = (sequence: number) => {
      const entry = batch(sequence)
      entry.torque[0] = 1e6
      return entry
    }
    send(adaptation, batch(1))

    const [first, second, third] = [2, 3, 4].map(sequence => send(adaptation, spike(sequence)))

    expect(first.changedTo).toBeNull()
    expect(second.changedTo).toBeNull()
    expect(third.changedTo).toMatchObject({ state: 'frozen', cause: 'rejections' })
    expect(adaptation.status()).toMatchObject({ state: { state: 'frozen' }, rejectionsInARow: 3, revision: 2 })
    expect(predictAdapted(adaptation, batch(1))).toEqual(predictBase(batch(1)).torque)
    expect(codesOf(send(adaptation, batch(5)))).toEqual(['frozen'])
  })

  test('ends with a resume', () => {
    const adaptation = createAdaptation(kernels, inputsOf({ ...gentle, guard: { rejectionsBeforeFreeze: 1 } }))
    const entry = batch(1)
    entry.torque[0] = 1e6
    send(adaptation, entry)

    adaptation.prepare({ kind: 'command', command: 'resume', reason: 'Sensor replaced.' })
    adaptation.publish()

    expect(adaptation.status()).toMatchObject({ state: { state: 'adapting' }, rejectionsInARow: 0 })
    expect(send(adaptation, batch(2)).verdict).toBe('accepted')
  })
})

test('every reason says what was found in a sentence', () => {
  const adaptation = createAdaptation(
    kernels,
    inputsOf({ ...gentle, guard: { stepNorm: 1e-6, torqueChange: 0.001, drift: 0.001 } }),
  )

  const { reasons } = send(adaptation, batch(1, { offset: () => 2 }))

  expect(reasons.map(({ code }) => code)).toEqual(['step_norm', 'torque_change', 'drift'])
  for (const { detail, found, bound } of reasons) {
    expect(detail).toContain(String(Number(found!.toPrecision(4))))
    expect(detail).toContain(String(Number(bound!.toPrecision(4))))
  }
})

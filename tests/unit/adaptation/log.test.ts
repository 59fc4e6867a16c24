import { describe, expect, test } from 'vitest'
import {
  createAdaptation,
  restoreAdaptation,
  type Adaptation,
  type CommandEntry,
  type EventEntry,
  type LogEntry,
  type LossVersion,
  type RequestedSettings,
} from '../../../shared/dynamics/index.ts'
import { batch, inputsOf, kernels, lossOf, predictAdapted, predictBase, send } from './two-joint-arm.ts'

const gentle: RequestedSettings = { scheme: 'all', update: { kind: 'sgd', rate: 0.02 } }

function enter(adaptation: Adaptation, entry: LogEntry) {
  const outcome = adaptation.prepare(entry)
  adaptation.publish()
  return outcome
}

function event(sequence: number, time: number, kind: EventEntry['event'], skipped = 0): EventEntry {
  return { kind: 'event', sequence, skipped, time, event: kind }
}

function command(name: CommandEntry['command']): CommandEntry {
  return { kind: 'command', command: name, reason: 'Because.' }
}

describe('the log', () => {
  test('takes the next sequence only, and says which that is', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    send(adaptation, batch(1))

    expect(adaptation.check(batch(2))).toBeNull()
    expect(adaptation.check(batch(1, { from: 1 }))).toMatchObject({ code: 'sequence_repeated', expectedSequence: 2 })
    expect(adaptation.check(batch(4))).toMatchObject({ code: 'sequence_gap', expectedSequence: 2 })
    expect(adaptation.check(event(4, 1, 'gripped'))).toMatchObject({ code: 'sequence_gap', expectedSequence: 2 })
  })

  test('takes a later sequence when exactly the ones between are declared as skipped', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    send(adaptation, batch(1))

    expect(adaptation.check(batch(4, { skipped: 1 }))).toMatchObject({ code: 'sequence_gap' })
    expect(adaptation.check(batch(4, { skipped: 3 }))).toMatchObject({ code: 'sequence_gap' })
    send(adaptation, batch(4, { skipped: 2 }))
    expect(adaptation.status().nextSequence).toBe(5)
  })

  test('takes rising times only, within a batch and across batches', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    send(adaptation, batch(1))
    const doubled = batch(2)
    doubled.time[2] = doubled.time[1]

    expect(adaptation.check(batch(2, { from: 0.06 }))).toMatchObject({ code: 'time_not_rising', row: 0 })
    expect(adaptation.check(doubled)).toMatchObject({ code: 'time_not_rising', row: 2 })
    expect(() => adaptation.prepare(doubled)).toThrow(RangeError)
  })

  test('keeps counting through a reset, which serves base again as a new revision', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    for (const sequence of [1, 2, 3]) send(adaptation, batch(sequence))

    const outcome = enter(adaptation, command('reset'))

    expect(outcome.revision).toBe(4)
    expect(adaptation.status()).toMatchObject({ revision: 4, nextSequence: 4, asOf: null, validUntil: null })
    expect(predictAdapted(adaptation, batch(4))).toEqual(predictBase(batch(4)).torque)
    expect(adaptation.check(batch(4, { from: 0.22 }))).toMatchObject({ code: 'time_not_rising' })
  })

  test('a reset does not unfreeze', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    enter(adaptation, command('freeze'))
    enter(adaptation, command('reset'))

    expect(adaptation.status().state.state).toBe('frozen')
  })

  test('is closed by an end', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    enter(adaptation, command('end'))

    expect(adaptation.check(batch(1))).toMatchObject({ code: 'ended' })
    expect(adaptation.check(command('reset'))).toMatchObject({ code: 'ended' })
  })

  test('resumes only what is frozen, while a second freeze keeps the first reason', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))

    expect(adaptation.check(command('resume'))).toMatchObject({ code: 'not_frozen' })
    expect(enter(adaptation, command('freeze')).changedTo).toMatchObject({
      state: 'frozen',
      cause: 'command',
      reason: 'Because.',
    })
    expect(enter(adaptation, { ...command('freeze'), reason: 'Again.' }).changedTo).toBeNull()
    expect(adaptation.status().state).toMatchObject({ reason: 'Because.' })
  })
})

describe('an event', () => {
  test('of a grip or a release changes nothing that is served', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    send(adaptation, batch(1))
    const before = predictAdapted(adaptation, batch(2))

    expect(enter(adaptation, event(2, 0.07, 'gripped'))).toMatchObject({ revision: 1, changedTo: null })
    expect(enter(adaptation, event(3, 0.07, 'released'))).toMatchObject({ revision: 1, changedTo: null })
    expect(predictAdapted(adaptation, batch(2))).toEqual(before)
  })

  test('of another tool freezes for good and serves base: what was learned is of another context', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    send(adaptation, batch(1))

    const outcome = enter(adaptation, event(2, 0.07, 'tool_changed'))

    expect(outcome).toMatchObject({ revision: 2, changedTo: { state: 'frozen', cause: 'context_changed' } })
    expect(predictAdapted(adaptation, batch(2))).toEqual(predictBase(batch(2)).torque)
    expect(adaptation.check(command('resume'))).toMatchObject({ code: 'context_changed' })
    expect(adaptation.check(command('end'))).toBeNull()
  })

  test('of a restart lets the clock begin anew and keeps the network', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    send(adaptation, batch(1, { from: 100 }))
    const before = predictAdapted(adaptation, batch(2))

    const outcome = enter(adaptation, event(2, 0, 'restarted'))

    expect(outcome).toMatchObject({ revision: 2, changedTo: null })
    expect(predictAdapted(adaptation, batch(2))).toEqual(before)
    expect(adaptation.status().asOf).toBeNull()
    expect(send(adaptation, batch(3, { from: 0 })).verdict).toBe('accepted')
  })

  test('of a restart empties what Adam remembers: its next step moves parameters by the rate, as a first step does', () => {
    const rate = 0.003
    const adaptation = createAdaptation(kernels, inputsOf({ scheme: 'all', update: { kind: 'adam', rate } }))
    for (const sequence of [1, 2, 3, 4, 5]) send(adaptation, batch(sequence, { offset: () => (sequence % 2 === 0 ? 1 : -0.4) }))
    enter(adaptation, event(6, 0, 'restarted'))
    const before = adaptation.snapshot().parameters

    send(adaptation, batch(7, { from: 0 }))

    const moved = adaptation
      .snapshot()
      .parameters.map((value, k) => Math.abs(value - before[k]))
      .filter(change => change > 0)
    expect(moved.length).toBeGreaterThan(20)
    // m / √v is ±1 after one gradient; f32 parameters near 1 round to 6e-8.
    for (const change of moved) expect(Math.abs(change - rate)).toBeLessThan(2e-6)
  })

  test('of a restart drops a bias, since torque sensors are zeroed', () => {
    const adaptation = createAdaptation(kernels, inputsOf({ scheme: 'bias' }))
    send(adaptation, batch(1))
    enter(adaptation, event(2, 0.1, 'restarted'))

    expect(predictAdapted(adaptation, batch(2))).toEqual(predictBase(batch(2)).torque)
  })
})

describe('preparing ahead of publishing', () => {
  const entries = (): LogEntry[] => [
    batch(1),
    batch(2),
    event(3, 0.15, 'gripped'),
    batch(4, { from: 0.16 }),
    command('freeze'),
    batch(5, { from: 0.24 }),
    command('resume'),
    batch(6, { from: 0.32 }),
    command('reset'),
    batch(7, { from: 0.4 }),
  ]

  test('serves each state only once it is published, and the same outcomes as one at a time', () => {
    const oneByOne = createAdaptation(kernels, inputsOf(gentle))
    const ahead = createAdaptation(kernels, inputsOf(gentle))

    const outcomes = entries().map(entry => ahead.prepare(entry))

    expect(ahead.status()).toMatchObject({ revision: 0, nextSequence: 1 })
    expect(ahead.tip().nextSequence).toBe(8)
    expect(ahead.inFlight).toBe(10)
    entries().forEach((entry, k) => {
      expect(outcomes[k]).toEqual(enter(oneByOne, entry))
      ahead.publish()
      expect(ahead.checkpoint()).toEqual(oneByOne.checkpoint())
      expect(predictAdapted(ahead, batch(1))).toEqual(predictAdapted(oneByOne, batch(1)))
    })
    expect(() => ahead.publish()).toThrow(RangeError)
  })

  test('discards everything prepared, as if it had never been', () => {
    const untouched = createAdaptation(kernels, inputsOf(gentle))
    const discarded = createAdaptation(kernels, inputsOf(gentle))
    send(untouched, batch(1))
    send(discarded, batch(1))
    for (let sequence = 2; sequence < 60; sequence++) discarded.prepare(batch(sequence, { offset: () => -0.4 }))

    discarded.discard()

    expect(discarded.inFlight).toBe(0)
    expect(discarded.checkpoint()).toEqual(untouched.checkpoint())
    expect(send(discarded, batch(2))).toEqual(send(untouched, batch(2)))
    expect(discarded.checkpoint()).toEqual(untouched.checkpoint())
  })

  test('takes no more memory however often it is discarded', () => {
    const adaptation = createAdaptation(kernels, inputsOf(gentle))
    const prepareAndDiscard = () => {
      for (const sequence of [1, 2, 3, 4, 5]) adaptation.prepare(batch(sequence))
      adaptation.discard()
    }
    prepareAndDiscard()
    const used = kernels.usedBytes

    for (let k = 0; k < 10; k++) prepareAndDiscard()

    expect(kernels.usedBytes).toBe(used)
  })
})

/** A life with everything in it: learning, a payload that goes, spikes, a gap, events, commands, large batches. */
function life(length: number): LogEntry[] {
  const entries: LogEntry[] = []
  let sequence = 0
  let time = 0
  for (let k = 0; k < length; k++) {
    if (k === 20) entries.push(event(++sequence, time, 'gripped'))
    if (k === 45) entries.push(command('freeze'))
    if (k === 47) entries.push(command('resume'))
    if (k === 70) entries.push(command('reset'))
    if (k === 90) entries.push(event(++sequence, time, 'restarted'))
    if (k === 60) time += 0.4
    const rows = k % 25 === 24 ? 40 : 1 + (k % 5)
    const offset = (row: number, joint: number) => Math.sin(k / 9 + joint) * (k < 80 ? 1 : 0.1) + 0.05 * Math.sin(17 * row + k)
    const entry = batch(++sequence, { rows, from: time, offset })
    if (k % 17 === 16) entry.torque[0] = 1e6
    entries.push(entry)
    time = entry.time[rows - 1] + 0.02
  }
  return entries
}

const cases: [string, RequestedSettings, LossVersion | 'mse'][] = [
  ['all, sgd, mse', { scheme: 'all', update: { kind: 'sgd', rate: 0.02 } }, 'mse'],
  ['all, adam, mse', { scheme: 'all', update: { kind: 'adam', rate: 0.003 } }, 'mse'],
  ['all, sgd, state_dependent', { scheme: 'all', update: { kind: 'sgd', rate: 0.02 } }, lossOf('state_dependent', 'all')],
  [
    'last_layer, sgd, structured',
    { scheme: 'last_layer', update: { kind: 'sgd', rate: 0.02 } },
    lossOf('structured', 'last_layer'),
  ],
  [
    'last_layer, adam, unstructured',
    { scheme: 'last_layer', update: { kind: 'adam', rate: 0.003 } },
    lossOf('unstructured', 'last_layer'),
  ],
  [
    'bias, sgd, state_dependent',
    { scheme: 'bias', update: { kind: 'sgd', rate: 0.3, fade: 0.7 } },
    lossOf('state_dependent', 'bias'),
  ],
  ['bias, adam, mse', { scheme: 'bias', update: { kind: 'adam', rate: 0.1, fade: 0.7 } }, 'mse'],
]

describe.each(cases)('the state of %s', (_name, requested, loss) => {
  // A tight tolerance, so that restoring the last good state is part of the life.
  const inputs = inputsOf({ ...requested, guard: { toleranceFloor: 0.05, rejectionsBeforeFreeze: 40 } }, loss)

  test('is the same to the bit for the same log', () => {
    const [one, other] = [createAdaptation(kernels, inputs), createAdaptation(kernels, inputs)]

    const outcomes = life(110).map(entry => enter(one, entry))

    expect(life(110).map(entry => enter(other, entry))).toEqual(outcomes)
    expect(other.checkpoint()).toEqual(one.checkpoint())
    const verdicts = new Set(outcomes.map(outcome => (outcome.kind === 'batch' ? outcome.verdict : outcome.kind)))
    expect([...verdicts].sort()).toEqual(['accepted', 'command', 'event', 'rejected', 'stored'])
  })

  test('continues from any checkpoint to the bits of an uninterrupted life', () => {
    const entries = life(110)
    const uninterrupted = createAdaptation(kernels, inputs)
    const outcomes: unknown[] = []
    const checkpoints: Uint8Array[] = []
    for (const entry of entries) {
      checkpoints.push(uninterrupted.checkpoint())
      outcomes.push(enter(uninterrupted, entry))
    }

    for (const from of [0, 1, 13, 21, 47, 64, 78, 98]) {
      const restored = restoreAdaptation(kernels, inputs, checkpoints[from])
      expect(restored.checkpoint()).toEqual(checkpoints[from])
      const again = entries.slice(from).map(entry => enter(restored, entry))
      expect(again).toEqual(outcomes.slice(from))
      expect(restored.checkpoint()).toEqual(uninterrupted.checkpoint())
      restored.release()
    }
  })
})

test('a checkpoint of another scheme, or cut short, or followed by more, is refused', () => {
  const bias = createAdaptation(kernels, inputsOf({ scheme: 'bias' }))
  const bytes = bias.checkpoint()

  expect(() => restoreAdaptation(kernels, inputsOf(gentle), bytes)).toThrow(RangeError)
  expect(() => restoreAdaptation(kernels, bias.inputs, bytes.subarray(0, bytes.length - 9))).toThrow(RangeError)
  expect(() => restoreAdaptation(kernels, bias.inputs, Uint8Array.from([...bytes, 0]))).toThrow(RangeError)
})

test('releasing an adaptation gives all its kernel memory back', () => {
  const inputs = inputsOf({ scheme: 'all', update: { kind: 'adam' } })
  createAdaptation(kernels, inputs).release()
  const before = kernels.usedBytes
  const adaptation = createAdaptation(kernels, inputs)
  for (const entry of life(60)) enter(adaptation, entry)

  adaptation.release()

  expect(kernels.usedBytes).toBe(before)
})

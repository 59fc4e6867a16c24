import { describe, expect, it } from 'vitest'
import { ConnectionError, ProblemError } from '../../../sdk/index.ts'
import type { Heftwise, Schemas } from '../../../sdk/index.ts'
import { createLink } from '../../../sdk/demo/link.ts'
import type { Source } from '../../../sdk/demo/link.ts'
import { planShift } from '../../../shared/simulation/pottery.ts'
import { formatResults } from '../../../sdk/demo/table.ts'
import { runTrial } from '../../../sdk/demo/trial.ts'

const n = 7
const shift = planShift(10, 1)
const { signal } = new AbortController()

/** A service that keeps what it is sent and predicts zero torque; `failures` says for how many calls it does not answer. */
function createService(failures = { left: 0, isStored: false }, validUntil = 1e9) {
  const log: (Schemas['Batch'] | Schemas['NewEvent'])[] = []
  const store = (entry: Schemas['Batch'] | Schemas['NewEvent']): void => {
    const expected = log.length === 0 ? 1 : log.at(-1)!.sequence + 1
    if (failures.left > 0) {
      failures.left--
      if (failures.isStored) log.push(entry)
      throw new ConnectionError('no answer')
    }
    if (entry.sequence - (entry.skipped ?? 0) !== expected) {
      throw new ProblemError(
        409,
        { type: 'x', title: 'gap', status: 409, detail: '', expected_sequence: expected } as unknown as Schemas['Problem'],
        {},
      )
    }
    log.push(entry)
  }
  const predict = (body: { position: number[][] }) => ({ torque: body.position.map(() => Array(n).fill(0)) })
  const heftwise = {
    predict: async (_model: string, body: { position: number[][] }) => predict(body),
    adaptations: {
      postBatch: async (_id: string, body: Schemas['Batch']) => {
        store(body)
        return { verdict: 'accepted' }
      },
      postEvent: async (_id: string, body: Schemas['NewEvent']) => store(body),
      predict: async (_id: string, body: { position: number[][] }) => ({
        ...predict(body),
        model: 'm',
        version: 1,
        as_of: 0,
        valid_until: validUntil,
      }),
    },
  } as unknown as Heftwise
  return { heftwise, log }
}

function row(time: number) {
  const zeros = new Float64Array(n)
  return { time, position: zeros, velocity: zeros, acceleration: zeros, torque: zeros }
}

function open(heftwise: Heftwise, source: Source = { adaptation: 'a' }) {
  return createLink({ heftwise, joints: 'x', source, motion: shift.motion, size: n, signal })
}

describe("the demo's link to the service", () => {
  it('sends an event between the rows before and after it, in one sequence', async () => {
    const { heftwise, log } = createService()
    const link = open(heftwise)
    link.log(row(0.02))
    link.announce('gripped', 0.03)
    link.log(row(0.04))
    await link.exchange(0.08, 0.08)

    expect(log.map((entry) => [entry.sequence, 'kind' in entry ? entry.kind : entry.time])).toEqual([
      [1, [0.02]],
      [2, 'gripped'],
      [3, [0.04]],
    ])
  })

  it('repeats what was not answered under its sequence, and goes on', async () => {
    const { heftwise, log } = createService({ left: 1, isStored: false })
    const link = open(heftwise)
    link.log(row(0.02))
    expect(await link.exchange(0.08, 0.08)).toBeUndefined()
    link.log(row(0.1))
    expect(await link.exchange(0.16, 0.16)).toBeDefined()

    expect(log.map(({ sequence, time }) => [sequence, time])).toEqual([
      [1, [0.02]],
      [2, [0.1]],
    ])
    expect(link.counters).toMatchObject({ failed: 1, skipped: 0, batches: { accepted: 2 } })
  })

  it('drops the oldest when the service is away for long, and declares how many', async () => {
    const { heftwise, log } = createService({ left: 60, isStored: false })
    const link = open(heftwise)
    for (let k = 0; k < 61; k++) {
      link.log(row(k * 0.08 + 0.02))
      await link.exchange(k * 0.08, k * 0.08)
    }

    expect(link.counters).toMatchObject({ failed: 60, skipped: 11, batches: { accepted: 50 } })
    expect([log[0].sequence, log[0].skipped]).toEqual([12, 11])
  })

  it('takes the base version when the adaptation has stood still for too long', async () => {
    const { heftwise } = createService(undefined, 1)
    const link = open(heftwise)

    expect((await link.exchange(0.9, 0.9))!.expires).toBe(1)
    expect(link.counters.onBase).toBe(0)
    expect((await link.exchange(1.5, 1.5))!.expires).toBe(2.5)
    expect(link.counters.onBase).toBe(1)
  })

  it('asks for what lies ahead on the desired trajectory', async () => {
    const { heftwise } = createService()
    const horizon = (await open(heftwise, { model: 'm' }).exchange(1, 1))!

    expect(horizon.time[0]).toBe(1)
    expect(horizon.time.at(-1)).toBeGreaterThan(1.2)
    expect(horizon.torque).toHaveLength(horizon.time.length * n)
  })
})

describe('a trial of the demo', () => {
  it('measures with and without payload, posts the grip, and runs on predictions nearly all the time', async () => {
    const { heftwise, log } = createService()
    const link = open(heftwise)
    const result = await runTrial({ name: 'a', shift, seed: 1, link, isRealtime: false, signal, onProgress: () => undefined })

    expect(result.loaded.duration + result.unloaded.duration).toBeCloseTo(10, 1)
    expect(result.loaded.duration).toBeGreaterThan(3)
    // A feed-forward of zero leaves all torque to feedback: gravity of a shoulder, some tens of newton metres.
    expect(result.loaded.torque[1]).toBeGreaterThan(20)
    expect(log.filter((entry) => 'kind' in entry).map((entry) => 'kind' in entry && entry.kind)).toEqual(['gripped'])
    const { horizon, held, local, fallback, late } = result.feedForward!
    expect(horizon / (horizon + held + local + fallback)).toBeGreaterThan(0.99)
    expect(late).toBe(0)
  })

  it('ends with a sentence when the service stops answering', async () => {
    const { heftwise } = createService({ left: Infinity, isStored: false })
    const trial = { name: 'a', shift, seed: 1, link: open(heftwise), isRealtime: false, signal, onProgress: () => undefined }

    await expect(runTrial(trial)).rejects.toThrow('Heftwise has stopped answering. Is it still running?')
  })

  it('is as good without a service as the controller alone can be, and the same every time', async () => {
    const run = () => runTrial({ name: 'alone', shift, seed: 1, isRealtime: false, signal, onProgress: () => undefined })
    const [first, again] = [await run(), await run()]

    expect(again).toEqual(first)
    expect(Math.max(...first.unloaded.tracking)).toBeLessThan(0.05)
    expect(formatResults([first], Array(n).fill('joint'))).toMatch(/all joints/)
  })

  it('stops early and keeps what it measured when it is told to', async () => {
    const stop = new AbortController()
    const result = await runTrial({
      name: 'a',
      shift,
      seed: 1,
      isRealtime: false,
      signal: stop.signal,
      onProgress: (now) => {
        if (now >= 2) stop.abort()
      },
    })

    expect(result.loaded.duration + result.unloaded.duration).toBeCloseTo(2, 1)
  })
})

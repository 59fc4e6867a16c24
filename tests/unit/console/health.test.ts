import { expect, it } from 'vitest'
import type { Adaptation, LogEntry } from '../../../console/features/adaptations/adaptations.ts'
import { attentionOf, healthOf, urgency } from '../../../console/features/adaptations/health.ts'
import { frozenSpans } from '../../../console/features/adaptations/log.ts'

const now = Date.parse('2026-03-01T12:00:00Z')
const ago = (seconds: number) => new Date(now - seconds * 1000).toISOString()

function adaptation(more: Partial<Adaptation>): Adaptation {
  return {
    state: 'adapting',
    frozen: null,
    revision: 7,
    rejections_in_a_row: 0,
    guard: { rejections_before_freeze: 20 },
    last_batch: { position: 1, entry: 'batch', sequence: 1, revision: 7, at: ago(2) },
    created_at: ago(3600),
    ...more,
  } as Adaptation
}

it.each([
  { state: 'adapting', given: adaptation({}) },
  { state: 'rejecting', given: adaptation({ rejections_in_a_row: 2 }) },
  { state: 'rejecting', given: adaptation({ rejections_in_a_row: 1, last_batch: { position: 1, entry: 'batch', sequence: 1, revision: 7, at: ago(2), verdict: 'rejected' } }) },
  { state: 'adapting', given: adaptation({ rejections_in_a_row: 1 }) },
  { state: 'silent', given: adaptation({ last_batch: { position: 1, entry: 'batch', sequence: 1, revision: 7, at: ago(61) } }) },
  { state: 'silent', given: adaptation({ last_batch: null }) },
  { state: 'frozen', given: adaptation({ state: 'frozen', frozen: { reason: 'too many', at: ago(5), by: 'guard' }, last_batch: null }) },
  { state: 'ended', given: adaptation({ state: 'ended' }) },
])('an adaptation that is $state is shown so', ({ state, given }) => {
  expect(healthOf(given, now).state).toBe(state)
})

it('the worst comes first, and only what asks for attention has words', () => {
  const frozen = adaptation({ state: 'frozen', frozen: { reason: 'too many', at: ago(5), by: 'guard' } })
  const silent = adaptation({ last_batch: null })
  const well = adaptation({})

  expect([well, silent, frozen].map((each) => urgency(healthOf(each, now)))).toEqual([3, 2, 0])
  expect(attentionOf(frozen, healthOf(frozen, now))).toBe('Frozen by its guards: too many')
  expect(attentionOf(silent, healthOf(silent, now))).toBe('No batch yet, 1 h after it was started')
  expect(attentionOf(well, healthOf(well, now))).toBeUndefined()
})

it('frozen spans run from freeze to resume, or to the newest entry', () => {
  const entry = (position: number, more: Partial<LogEntry> = {}): LogEntry => ({ position, entry: 'batch', sequence: position, revision: 1, at: ago(0), ...more })
  const entries = [entry(1), entry(2, { entry: 'command', command: 'freeze' }), entry(3), entry(4, { entry: 'command', command: 'resume' }), entry(5), entry(6, { reasons: [{ code: 'frozen', detail: '' }] }), entry(7)]

  expect(frozenSpans(entries, true)).toEqual([
    [2, 4],
    [6, 7],
  ])
})

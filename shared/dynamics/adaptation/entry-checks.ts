import type { AdaptationState, BatchEntry, CommandEntry, EventEntry, Refusal } from './adaptation.ts'

/** Whether a command can follow; null when it can. */
export function checkCommand({ command }: CommandEntry, mode: AdaptationState): Refusal | null {
  if (command !== 'resume') return null
  if (mode.state !== 'frozen')
    return { code: 'not_frozen', detail: 'The adaptation is adapting; only a frozen one can be resumed.' }
  return mode.cause === 'context_changed' ? { code: 'context_changed', detail: mode.reason } : null
}

/** Whether a batch or an event has the sequence that comes next, or the one after those declared as skipped. */
export function checkSequence({ sequence, skipped }: BatchEntry | EventEntry, expected: number): Refusal | null {
  if (sequence === expected + skipped) return null
  if (sequence < expected) {
    return {
      code: 'sequence_repeated',
      detail: `Sequence ${sequence} is in the log already; ${expected} comes next.`,
      expectedSequence: expected,
    }
  }
  const declared = skipped > 0 ? ` with ${skipped} declared as skipped` : ''
  return {
    code: 'sequence_gap',
    expectedSequence: expected,
    detail:
      `Sequence ${sequence}${declared} does not follow: ${expected} comes next. ` +
      'Send it, or declare in "skipped" how many were dropped.',
  }
}

/** Whether a batch's times are finite and rise, from the newest row in the log on (NaN: none). */
export function checkTimes({ rows, time }: BatchEntry, lastTime: number): Refusal | null {
  let before = lastTime
  for (let row = 0; row < rows; row++) {
    if (time[row] <= before || !(Math.abs(time[row]) < Infinity)) {
      const after = row === 0 ? `${before} s, the newest row in the log` : `${before} s of the row before`
      return { code: 'time_not_rising', detail: `time: row ${row} is ${time[row]} s, not after ${after}.`, row }
    }
    before = time[row]
  }
  return null
}

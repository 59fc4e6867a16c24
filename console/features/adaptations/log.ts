import { significant } from '../../lib/numbers.ts'
import type { LogEntry } from './adaptations.ts'

const events: Record<NonNullable<LogEntry['kind']>, string> = {
  gripped: 'gripped',
  released: 'released',
  tool_changed: 'tool changed',
  restarted: 'restarted',
}
const commands: Record<NonNullable<LogEntry['command']>, string> = {
  freeze: 'frozen',
  resume: 'resumed',
  reset: 'reset',
  end: 'ended',
}

export function eventWords(entry: LogEntry): string {
  const word = entry.kind === undefined ? 'event' : events[entry.kind]
  return entry.payload === undefined ? word : `${word} ${significant(entry.payload.mass)} kg`
}

export function commandWords(entry: LogEntry): string {
  return entry.command === undefined ? 'command' : commands[entry.command]
}

/** From where to where in the log an adaptation was frozen, by position. */
export function frozenSpans(entries: LogEntry[], frozenNow: boolean): [from: number, to: number][] {
  const spans: [number, number][] = []
  let from: number | undefined
  for (const entry of entries) {
    const startsFrozen = entry.command === 'freeze' || entry.reasons?.some((reason) => reason.code === 'frozen')
    if (startsFrozen) from ??= entry.position
    if (entry.command === 'resume' && from !== undefined) {
      spans.push([from, entry.position])
      from = undefined
    }
  }
  const last = entries.at(-1)
  if (last && from !== undefined) spans.push([from, last.position])
  else if (last && frozenNow) spans.push([last.position, last.position])
  return spans
}

import { useSyncExternalStore } from 'react'

const listeners = new Set<() => void>()
let now = Date.now()
let timer: ReturnType<typeof setInterval> | undefined

/** One clock for the whole page, ticking once a second while somebody looks at it. */
function subscribe(listener: () => void): () => void {
  listeners.add(listener)
  timer ??= setInterval(() => {
    now = Date.now()
    for (const each of listeners) each()
  }, 1000)
  return () => {
    listeners.delete(listener)
    if (listeners.size > 0) return
    clearInterval(timer)
    timer = undefined
  }
}

export function useNow(): number {
  return useSyncExternalStore(subscribe, () => {
    // Without a listener the clock stands still; it may not move between two looks of one render.
    if (timer === undefined && Date.now() - now > 1000) now = Date.now()
    return now
  })
}

const steps: [seconds: number, unit: string][] = [
  [86_400 * 365, 'y'],
  [86_400, 'd'],
  [3_600, 'h'],
  [60, 'min'],
]

/** How long a span is, in its largest unit: 12 s, 4 min, 3 d. */
export function span(ms: number): string {
  const seconds = Math.max(0, ms) / 1000
  for (const [size, unit] of steps) if (seconds >= size) return `${Math.floor(seconds / size)} ${unit}`
  return `${Math.floor(seconds)} s`
}

/** "12 s ago", "in 3 d", "just now". The two clocks may differ by a little, so a moment ahead counts as now. */
export function relative(at: number, from: number): string {
  const ago = from - at
  if (ago < 1_500 && ago > -5_000) return 'just now'
  return ago > 0 ? `${span(ago)} ago` : `in ${span(-ago)}`
}

const exactFormat = new Intl.DateTimeFormat(undefined, { dateStyle: 'medium', timeStyle: 'medium' })
const dayFormat = new Intl.DateTimeFormat(undefined, { dateStyle: 'medium' })

/** In the viewer's zone, with UTC beside it. */
export function exact(iso: string): string {
  return `${exactFormat.format(new Date(iso))} (${new Date(iso).toISOString().replace('T', ' ').slice(0, 19)} UTC)`
}

export function day(iso: string): string {
  return dayFormat.format(new Date(iso))
}

/** Seconds of the robot's own clock, which is no date. */
export function robotTime(seconds: number): string {
  return seconds.toFixed(2)
}

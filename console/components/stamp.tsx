import type { ReactNode } from 'react'

export type Tone = 'live' | 'load' | 'stop' | 'soft' | 'ink'

const tones: Record<Tone, string> = {
  live: 'text-live',
  load: 'text-load',
  stop: 'text-stop',
  soft: 'text-soft',
  ink: 'text-ink',
}

/** Each state has a mark of its own shape, so that it can be told apart without its colour. */
const marks = {
  dot: <circle cx="5" cy="5" r="4" fill="currentColor" />,
  wave: <path d="M.5 6.500C2 6.5 2.5 2 4 2s1.5 6 3 6 1.5-3 2.5-3" fill="none" stroke="currentColor" strokeWidth="1.8" />,
  pause: <path d="M2.5 1v8M7.5 1v8" stroke="currentColor" strokeWidth="2.4" />,
  ring: <circle cx="5" cy="5" r="3.6" fill="none" stroke="currentColor" strokeWidth="1.5" />,
  bar: <path d="M1 5h8" stroke="currentColor" strokeWidth="2" />,
  cross: <path d="m1.5 1.5 7 7m0-7-7 7" stroke="currentColor" strokeWidth="1.8" />,
  half: <path d="M5 1a4 4 0 0 1 0 8Z" fill="currentColor" stroke="currentColor" strokeLinejoin="round" />,
  diamond: <path d="M5 .8 9.2 5 5 9.2.8 5Z" fill="none" stroke="currentColor" strokeWidth="1.5" />,
  check: <path d="m1 5.5 2.8 2.800L9 2" fill="none" stroke="currentColor" strokeWidth="1.8" />,
} satisfies Record<string, ReactNode>

export type MarkName = keyof typeof marks

/** State as a stamp: a mark and a word. */
export function Stamp({ tone, mark, children, title }: { tone: Tone; mark: MarkName; children: ReactNode; title?: string }) {
  return (
    <span title={title} className={`inline-flex items-center gap-1.5 text-14 font-semibold whitespace-nowrap ${tones[tone]}`}>
      <svg viewBox="0 0 10 10" aria-hidden="true" className="size-2.5 shrink-0">
        {marks[mark]}
      </svg>
      {children}
    </span>
  )
}

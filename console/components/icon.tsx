const shapes = {
  overview: 'M2.5 13.5v-4m4 4v-8m4 8v-5m3 5v-10',
  adaptations: 'M1.5 10.5c2 0 2-6 4-6s2 9 4.5 9 2-7 4.5-7',
  models: 'M8 1.5 14 5v6l-6 3.500L2 11V5Zm0 6.500L2.3 5.200M8 8l5.7-2.800M8 8v6.3',
  losses: 'M2 2.5c.5 9 3.5 10.5 6 10.5s5.5-1.5 6-10.5M8 8.2v1.6',
  arms: 'M2.5 14h6M5.5 14v-3L3.5 7 9 3.5l3.5 3M12.5 6.5v3m-1.5 0h3',
  recordings: 'M2 3.500h12v9H2Zm0 4.500h2l1.5-2.500L8 10.500l1.5-2.500H14',
  jobs: 'M8 1.500a6.5 6.5 0 1 0 6.5 6.500M8 4.500V8l2.5 2',
  keys: 'M5 5.5a2.5 2.5 0 1 0 0 5 2.5 2.5 0 0 0 0-5ZM7.5 8h7v2.5M11.5 8v2',
  menu: 'M2 4h12M2 8h12M2 12h12',
  close: 'm3.5 3.5 9 9m0-9-9 9',
  down: 'm4 6 4 4 4-4',
  left: 'M10 4 6 8l4 4',
  right: 'm6 4 4 4-4 4',
  copy: 'M5.5 5.500h8v8h-8Zm-3-3h8v2m-6 6h-2v-8',
  check: 'm3 8.5 3.5 3.500L13 4.5',
  plus: 'M8 3v10M3 8h10',
  attention: 'M8 2 14.5 13.500h-13Zm0 4.500v3m0 1.700v.6',
  system: 'M8 1.500a6.5 6.5 0 1 0 0 13Zm0 0a6.5 6.5 0 0 1 0 13',
  light:
    'M8 5a3 3 0 1 0 0 6 3 3 0 0 0 0-6Zm0-3.500V3m0 10v1.500M1.5 8H3m10 0h1.500M3.4 3.400l1 1m7.2 7.2 1 1m0-9.2-1 1M4.4 11.600l-1 1',
  dark: 'M13.5 9.500A6 6 0 0 1 6.5 2.500a6 6 0 1 0 7 7Z',
  signOut: 'M9.5 2.500h-7v11h7M6.5 8h8m-2.5-2.500L14.5 8 12 10.5',
  upload: 'M8 10.500v-8m-3 3 3-3 3 3M2.5 10.500v3h11v-3',
} as const

export type IconName = keyof typeof shapes

/** A drawn sign beside a word; never the only name of a control. */
export function Icon({ name, className = '' }: { name: IconName; className?: string }) {
  return (
    <svg viewBox="0 0 16 16" aria-hidden="true" className={`size-4 shrink-0 ${className}`}>
      <path d={shapes[name]} fill="none" stroke="currentColor" strokeWidth="1.4" strokeLinejoin="round" strokeLinecap="round" />
    </svg>
  )
}

/** Heftwise's mark: a load bar of one joint. */
export function Mark({ className = '' }: { className?: string }) {
  return (
    <svg viewBox="0 0 32 32" aria-hidden="true" className={className}>
      <path d="M2 16h28M3 12v8M29 12v8" fill="none" stroke="currentColor" strokeWidth="2" />
      <rect x="12" y="11" width="12" height="10" className="fill-live" />
      <path d="M12 5v22" fill="none" stroke="currentColor" strokeWidth="3" />
    </svg>
  )
}

import { NavLink } from 'react-router-dom'
import { Icon, type IconName } from '../components/icon.tsx'
import { Tooltip } from '../components/tooltip.tsx'
import type { Session } from '../features/session/session.ts'
import { paths } from '../lib/paths.ts'

interface Entry {
  to: string
  label: string
  icon: IconName
  /** Without this action the section is not there. */
  action?: string
}

const sections: { group: string; entries: Entry[] }[] = [
  {
    group: 'Watch',
    entries: [
      { to: paths.overview(), label: 'Overview', icon: 'overview' },
      { to: paths.adaptations(), label: 'Adaptations', icon: 'adaptations' },
    ],
  },
  {
    group: 'Build',
    entries: [
      { to: paths.models(), label: 'Models', icon: 'models' },
      { to: paths.losses(), label: 'Losses', icon: 'losses' },
      { to: paths.recordings(), label: 'Recordings', icon: 'recordings' },
      { to: paths.arms(), label: 'Arms', icon: 'arms' },
      { to: paths.jobs(), label: 'Jobs', icon: 'jobs' },
    ],
  },
  { group: 'Keep', entries: [{ to: paths.keys(), label: 'Keys', icon: 'keys', action: 'manage_keys' }] },
]

/** The sections that are there for this person, in their groups. */
export function Sections({ session, narrow, onChoose }: { session: Session; narrow: boolean; onChoose?: () => void }) {
  return (
    <div className="flex flex-col gap-4 py-3">
      {sections.map(({ group, entries }) => {
        const allowed = entries.filter((entry) => entry.action === undefined || session.actions.includes(entry.action))
        if (allowed.length === 0) return null
        return (
          <div key={group}>
            <p className={narrow ? 'mx-4 mb-1 border-t border-line' : 'px-4 pb-1 text-12 text-soft'}>
              {narrow ? <span className="sr-only">{group}</span> : group}
            </p>
            <ul>
              {allowed.map((entry) => (
                <li key={entry.to}>
                  <SectionLink entry={entry} narrow={narrow} onChoose={onChoose} />
                </li>
              ))}
            </ul>
          </div>
        )
      })}
    </div>
  )
}

function SectionLink({ entry, narrow, onChoose }: { entry: Entry; narrow: boolean; onChoose: (() => void) | undefined }) {
  const link = (
    <NavLink
      to={entry.to}
      end={entry.to === paths.overview()}
      onClick={onChoose}
      aria-label={narrow ? entry.label : undefined}
      className={({ isActive }) =>
        `flex h-8 items-center gap-3 border-l-3 pl-[calc(1rem-3px)] max-md:h-11 ${isActive ? 'border-ink font-semibold' : 'border-transparent text-soft hover:border-line hover:text-ink'}`
      }
    >
      <Icon name={entry.icon} />
      {!narrow && entry.label}
    </NavLink>
  )
  return narrow ? (
    <Tooltip text={entry.label} side="right">
      {link}
    </Tooltip>
  ) : (
    link
  )
}

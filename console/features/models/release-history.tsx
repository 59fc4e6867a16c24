import { TextLink } from '../../components/button.tsx'
import { Stamp } from '../../components/stamp.tsx'
import { Empty } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { paths } from '../../lib/paths.ts'
import type { Release } from './models.ts'

/** Releases and rollbacks, newest first, each with who and why; nothing is ever taken out. */
export function ReleaseHistory({ model, releases }: { model: string; releases: Release[] }) {
  if (releases.length === 0)
    return (
      <Empty title="Nothing has been released yet">
        A version serves unqualified predictions only once somebody has released it, with a reason.
      </Empty>
    )
  return (
    <ol className="border-t border-edge" aria-label="Releases and rollbacks">
      {releases.map((release, index) => (
        <li
          key={release.number}
          className="grid grid-cols-[2.5rem_9rem_1fr_auto] items-baseline gap-x-4 border-b border-line py-2.5 max-sm:grid-cols-[2.5rem_1fr_auto]"
        >
          <span className="num text-soft">{release.number}</span>
          <span>
            {index === 0 ? (
              <Stamp tone="live" mark="dot">
                live
              </Stamp>
            ) : release.kind === 'rollback' ? (
              <Stamp tone="load" mark="diamond">
                rolled back
              </Stamp>
            ) : (
              <Stamp tone="soft" mark="bar">
                released
              </Stamp>
            )}
          </span>
          <span className="min-w-0 max-sm:col-span-3 max-sm:row-start-2">
            <span className="font-semibold">
              {release.kind === 'rollback' ? 'Rolled back to ' : 'Released '}
              <TextLink to={paths.model(model, { version: release.version })}>version {release.version}</TextLink>
            </span>
            {release.previous_version !== null && (
              <span className="text-soft"> in place of version {release.previous_version}</span>
            )}
            <span className="block">{release.reason}</span>
          </span>
          <span className="text-right text-12 text-soft">
            {release.by}, <TimeAgo at={release.at} />
          </span>
        </li>
      ))}
    </ol>
  )
}

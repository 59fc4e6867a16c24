import type { ReactNode } from 'react'
import { Facts } from '../../components/page.tsx'
import { Quantity } from '../../components/quantity.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { change, grouped, significant } from '../../lib/numbers.ts'
import type { Version } from './models.ts'
import { Origin } from './version-list.tsx'

/** One version: how far it is off on data it did not see, per joint, beside the live one's. */
export function VersionDetails({ version, live }: { version: Version; live: Version | undefined }) {
  const against = live !== undefined && live.version !== version.version ? live : undefined
  const { metrics } = version
  const facts: [string, ReactNode][] = [
    ['Origin', <Origin key="origin" version={version} />],
    [
      'Made',
      <span key="made">
        {version.created_by}, <TimeAgo at={version.created_at} />
      </span>,
    ],
    [
      'Network',
      <span key="network" className="num">
        {version.network.sizes.join('–')}, {version.network.activation}
      </span>,
    ],
    [
      'Checksum',
      <code key="checksum" className="text-12 break-all">
        {version.checksum}
      </code>,
    ],
  ]
  if (version.origin.reason) facts.splice(1, 0, ['Reason', version.origin.reason])
  const measuredOn = metrics?.recordings.map((recording) => recording.name) ?? []
  const fittedOn =
    version.origin.recordings?.map((recording) => recording.name).filter((name) => !measuredOn.includes(name)) ?? []
  if (fittedOn.length > 0) facts.push(['Fitted on', <Recordings key="recordings" names={fittedOn} />])
  if (measuredOn.length > 0) facts.push(['Measured on', <Recordings key="measured" names={measuredOn} />])
  return (
    <div className="grid gap-8 lg:grid-cols-[3fr_2fr]">
      <div>
        {metrics ? (
          <>
            <p className="mb-3">
              Mean squared error <Quantity value={metrics.error} unit="base std²" className="font-semibold" />
              {against?.metrics && (
                <span className="text-soft">
                  {' '}
                  live version {against.version}: <span className="num">{significant(against.metrics.error)}</span>,{' '}
                  {change(against.metrics.error, metrics.error)}
                </span>
              )}
            </p>
            <JointErrors version={version} against={against} />
          </>
        ) : (
          <p className="text-soft">It came without metrics: nobody has measured it on recordings it did not see.</p>
        )}
      </div>
      <Facts items={facts} />
    </div>
  )
}

function Recordings({ names }: { names: string[] }) {
  const shown = names.slice(0, 4).join(', ')
  return <span title={names.join('\n')}>{names.length > 5 ? `${shown} and ${grouped(names.length - 4)} more` : shown}</span>
}

function JointErrors({ version, against }: { version: Version; against: Version | undefined }) {
  const joints = version.metrics!.per_joint
  const other = new Map(against?.metrics?.per_joint.map((metric) => [metric.joint, metric.rmse]))
  const most = Math.max(...joints.map((metric) => metric.rmse), ...other.values())
  const head = 'py-1.5 pr-4 text-left text-12 font-normal text-soft last:pr-0'
  return (
    <table aria-label="Error per joint" className="w-full border-collapse">
      <thead>
        <tr className="border-b border-edge">
          <th scope="col" className={head}>
            Joint
          </th>
          <th scope="col" className={`${head} w-1/2`}>
            {against ? `RMSE; the upright mark is version ${against.version}` : 'RMSE'}
          </th>
          <th scope="col" className={`${head} text-right`}>
            RMSE
          </th>
          {against && (
            <th scope="col" className={`${head} text-right`}>
              Change
            </th>
          )}
        </tr>
      </thead>
      <tbody>
        {joints.map((metric) => {
          const before = other.get(metric.joint)
          return (
            <tr key={metric.joint} className="border-b border-line">
              <th scope="row" className="py-2 pr-4 text-left">
                {metric.joint}
              </th>
              <td className="py-2 pr-4">
                <div aria-hidden="true" className="relative h-4">
                  <span className="absolute inset-x-0 top-1/2 h-px bg-line" />
                  <span
                    className="absolute top-1/2 left-0 h-2 -translate-y-1/2 bg-edge"
                    style={{ width: `${(metric.rmse / most) * 100}%` }}
                  />
                  {before !== undefined && (
                    <span className="absolute top-0 h-4 w-0.5 bg-ink" style={{ left: `calc(${(before / most) * 100}% - 1px)` }} />
                  )}
                </div>
              </td>
              <td className="py-2 pr-4 text-right last:pr-0">
                <Quantity value={metric.rmse} unit={metric.unit} />
              </td>
              {against && (
                <td className="num py-2 pl-4 text-right">{before === undefined ? '–' : change(before, metric.rmse)}</td>
              )}
            </tr>
          )
        })}
      </tbody>
    </table>
  )
}

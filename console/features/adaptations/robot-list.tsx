import { useQuery } from '@tanstack/react-query'
import { TextLink } from '../../components/button.tsx'
import { Sparkline } from '../../components/plot/sparkline.tsx'
import { Quantity } from '../../components/quantity.tsx'
import { Skeleton } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { change } from '../../lib/numbers.ts'
import { paths } from '../../lib/paths.ts'
import { trendOptions, type Adaptation } from './adaptations.ts'
import type { Health } from './health.ts'
import { HealthStamp } from './health-stamp.tsx'

interface Robot {
  adaptation: Adaptation
  health: Health
}

const columns =
  'grid grid-cols-[minmax(0,1.6fr)_9.5rem_10rem_minmax(0,1.2fr)_7rem] items-center gap-x-6 gap-y-1 max-lg:grid-cols-[minmax(0,1fr)_9.5rem_8rem] max-sm:grid-cols-[minmax(0,1fr)_auto]'

/** Robots beside each other: state, error now and how it went, when last heard. */
export function RobotList({ robots }: { robots: Robot[] }) {
  return (
    <div>
      <div aria-hidden="true" className={`${columns} pb-1.5 text-12 text-soft max-lg:hidden`}>
        <span>Robot</span>
        <span>State</span>
        <span>Error, newest 60 batches</span>
        <span>Before, after the newest step</span>
        <span className="text-right">Model, revision</span>
      </div>
      <ul className="border-t border-edge">
        {robots.map((robot) => (
          <RobotRow key={robot.adaptation.id} {...robot} />
        ))}
      </ul>
    </div>
  )
}

function RobotRow({ adaptation, health }: Robot) {
  const { last_batch: last } = adaptation
  return (
    <li className={`${columns} border-b border-line py-2.5`}>
      <div className="min-w-0">
        <TextLink to={paths.adaptation(adaptation.id)} className="font-semibold break-words">
          {adaptation.robot}
        </TextLink>
        <p className="truncate text-12 text-soft">
          {[adaptation.context.tool, adaptation.context.payload_class].filter(Boolean).join(', ') || 'no context stated'}
        </p>
      </div>
      <div className="max-sm:text-right">
        <HealthStamp health={health} />
        <p className="text-12 text-soft">
          {last === null ? (
            'no batch yet'
          ) : (
            <>
              heard <TimeAgo at={last.at} />
            </>
          )}
        </p>
      </div>
      <Trend adaptation={adaptation} />
      <p className="max-lg:hidden">
        <Quantity value={last?.error?.before} missing="" />
        {last?.error?.after != null && (
          <span className="text-12 text-soft">
            {' → '}
            <Quantity value={last.error.after} /> <span className="num">({change(last.error.before, last.error.after)})</span>
          </span>
        )}
      </p>
      <p className="text-right text-12 text-soft max-lg:hidden">
        <span className="num">
          {adaptation.model} {adaptation.version}
        </span>
        <span className="block num">revision {adaptation.revision}</span>
      </p>
    </li>
  )
}

function Trend({ adaptation }: { adaptation: Adaptation }) {
  const trend = useQuery(trendOptions(adaptation.id, adaptation.state === 'ended'))
  if (trend.isPending) return <Skeleton className="h-6 w-30" />
  if (!trend.data) return <span className="text-12 text-soft">not read</span>
  const words = trend.data.length < 2 ? '' : `, ${change(trend.data[0]!, trend.data.at(-1)!)} over ${trend.data.length} batches`
  return (
    <div className="max-sm:col-span-2">
      <Sparkline values={trend.data} label={`Error of ${adaptation.robot}${words}`} />
    </div>
  )
}

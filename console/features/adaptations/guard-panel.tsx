import type { ReactNode } from 'react'
import { Quantity } from '../../components/quantity.tsx'
import { counted, percent, significant } from '../../lib/numbers.ts'
import type { Adaptation, LogEntry } from './adaptations.ts'

type Code = NonNullable<LogEntry['reasons']>[number]['code']

interface Row {
  name: string
  bound: ReactNode
  newest?: ReactNode
  codes: Code[]
}

const share = (value: number | undefined, of?: string) =>
  value === undefined ? undefined : (
    <span className="whitespace-nowrap">
      <span className="num">{percent(value, 0)}</span> {of && <span className="text-12 text-soft">{of}</span>}
    </span>
  )

function guards(adaptation: Adaptation, newest: LogEntry | undefined): Row[] {
  const { guard } = adaptation
  return [
    {
      name: 'Size of a step',
      bound: <Quantity value={guard.step_norm} />,
      newest: <Quantity value={newest?.step_norm} />,
      codes: ['step_norm', 'not_finite'],
    },
    { name: 'Torque change by a step', bound: share(guard.torque_change, 'of limit'), codes: ['torque_change'] },
    { name: 'Distance from base', bound: share(guard.drift, 'of limit'), codes: ['drift'] },
    { name: 'Better on unseen rows', bound: <span className="text-12 text-soft">less error</span>, codes: ['no_help'] },
    { name: 'Worse than base', bound: share(guard.tolerance), codes: ['worse_than_base'] },
    { name: 'Torque of a plausible sign', bound: <span className="text-12 text-soft">as base</span>, codes: ['implausible'] },
    { name: 'Least motion', bound: <Quantity value={guard.excitation} unit="std" />, codes: ['excitation'] },
    { name: 'Longest gap', bound: <Quantity value={guard.gap_periods} unit="periods" digits={2} />, codes: ['gap'] },
    {
      name: 'Rejections in a row',
      bound: <Quantity value={guard.rejections_before_freeze} whole />,
      newest: (
        <span className={`num ${adaptation.rejections_in_a_row > 0 ? 'font-semibold text-load' : ''}`}>
          {adaptation.rejections_in_a_row}
        </span>
      ),
      codes: [],
    },
  ]
}

/** What a step must pass, what was found last, and how often it stopped one. */
export function GuardPanel({ adaptation, history }: { adaptation: Adaptation; history: LogEntry[] }) {
  const newest = history.at(-1)
  const count = (codes: Code[]) => history.filter((entry) => entry.reasons?.some((reason) => codes.includes(reason.code))).length
  const found = (codes: Code[]) =>
    history
      .findLast((entry) => entry.reasons?.some((reason) => codes.includes(reason.code)))
      ?.reasons?.find((reason) => codes.includes(reason.code))
  const tally = (['accepted', 'rejected', 'stored'] as const).map(
    (verdict) => [verdict, history.filter((entry) => entry.verdict === verdict).length] as const,
  )
  const belowNoise = count(['below_noise'])
  const cell = 'py-1.5 pr-3 align-top last:pr-0'
  return (
    <div>
      <Tally parts={tally} />
      <table aria-label="Guards" className="mt-3 w-full border-collapse">
        <thead>
          <tr className="border-b border-edge text-left text-12 text-soft">
            <th scope="col" className={`${cell} font-normal`}>
              Guard
            </th>
            <th scope="col" className={`${cell} text-right font-normal`}>
              Bound
            </th>
            <th scope="col" className={`${cell} text-right font-normal`}>
              Newest
            </th>
            <th scope="col" className={`${cell} text-right font-normal`}>
              Stopped
            </th>
          </tr>
        </thead>
        <tbody>
          {guards(adaptation, newest).map((row) => {
            const last = found(row.codes)
            const times = count(row.codes)
            return (
              <tr key={row.name} className="border-b border-line">
                <th scope="row" className={`${cell} text-left font-normal`}>
                  {row.name}
                  {last && <span className="block text-12 text-soft">last: {last.detail}</span>}
                </th>
                <td className={`${cell} text-right`}>{row.bound ?? '–'}</td>
                <td className={`${cell} text-right`}>{row.newest ?? <span className="text-soft">–</span>}</td>
                <td className={`${cell} num text-right ${times > 0 ? 'font-semibold text-load' : 'text-soft'}`}>
                  {row.codes.length === 0 ? '' : times}
                </td>
              </tr>
            )
          })}
        </tbody>
      </table>
      <p className="mt-2 text-12 text-soft">
        Over the newest {counted(history.length, 'batch', 'batches')}.
        {belowNoise > 0 && ` ${counted(belowNoise, 'batch was', 'batches were')} below the arm’s own noise: nothing to learn.`}
        {adaptation.update.rate !== undefined && ` Step size ${significant(adaptation.update.rate)}.`}
      </p>
    </div>
  )
}

const fills = { accepted: 'bg-live', rejected: 'hatch-load', stored: 'bg-edge' }

function Tally({ parts }: { parts: (readonly ['accepted' | 'rejected' | 'stored', number])[] }) {
  const total = parts.reduce((sum, [, count]) => sum + count, 0)
  return (
    <div>
      <div aria-hidden="true" className="flex h-2 gap-px bg-line">
        {total > 0 &&
          parts.map(
            ([verdict, count]) =>
              count > 0 && (
                <span key={verdict} className={`${fills[verdict]} h-full`} style={{ width: `${(count / total) * 100}%` }} />
              ),
          )}
      </div>
      <p className="mt-1.5 flex flex-wrap gap-x-4">
        {parts.map(([verdict, count]) => (
          <span key={verdict}>
            <span className="num font-semibold">{count}</span> <span className="text-12 text-soft">{verdict}</span>
          </span>
        ))}
      </p>
    </div>
  )
}

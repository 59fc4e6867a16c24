import { useMemo, useState } from 'react'
import { errorScale } from '../../components/plot/scale.ts'
import { change, significant, tickLabel } from '../../lib/numbers.ts'
import { relative, useNow } from '../../lib/times.ts'
import { useWidth } from '../../lib/use-width.ts'
import type { LogEntry } from './adaptations.ts'
import { commandWords, eventWords, frozenSpans } from './log.ts'

interface ErrorChartProps {
  /** Oldest first. */
  entries: LogEntry[]
  frozenNow: boolean
  /** The batch whose rows are looked at, by its place in the log. */
  selected: number | undefined
  onSelect: (position: number) => void
}

const height = 300
const top = 34
const bottom = 44

/**
 * Error against the steps of an adaptation: the error each batch met (line), what its step left (dots), rejected and stored batches
 * as marks on the axis, frozen spans shaded, events and commands as uprights.
 */
export function ErrorChart({ entries, frozenNow, selected, onSelect }: ErrorChartProps) {
  const [frame, width] = useWidth<HTMLDivElement>()
  const [cursor, setCursor] = useState<number>()
  const now = useNow()
  const narrow = width < 520
  const left = narrow ? 46 : 60
  const right = narrow ? 10 : 84
  const inner = Math.max(1, width - left - right)
  const first = entries[0]?.position ?? 0
  const length = Math.max(1, (entries.at(-1)?.position ?? 1) - first)
  const x = (position: number) => left + ((position - first) / length) * inner
  const batches = useMemo(() => entries.filter((entry) => entry.entry === 'batch' && entry.error), [entries])
  const axis = height - bottom
  const y = useMemo(
    () =>
      errorScale(
        batches.flatMap(({ error }) => [error!.before, ...(error!.after === null ? [] : [error!.after])]),
        axis - 6,
        top,
      ),
    [batches, axis],
  )
  const at = cursor === undefined ? undefined : batches.find((entry) => entry.position === cursor)
  const read = at ?? batches.find((entry) => entry.position === selected) ?? batches.at(-1)
  const newest = batches.at(-1)
  const newestAfter = batches.findLast((entry) => entry.error!.after !== null && entry.verdict === 'accepted')

  const nearest = (event: React.PointerEvent) => {
    const position = first + ((event.clientX - frame.current!.getBoundingClientRect().left - left) / inner) * length
    return batches.reduce<LogEntry | undefined>(
      (best, entry) => (!best || Math.abs(entry.position - position) < Math.abs(best.position - position) ? entry : best),
      undefined,
    )
  }

  return (
    <figure className="m-0">
      <div
        ref={frame}
        role="slider"
        tabIndex={0}
        aria-label="Error per batch; arrow keys move from batch to batch, Enter looks at its rows"
        aria-valuemin={batches[0]?.sequence ?? 0}
        aria-valuemax={newest?.sequence ?? 0}
        aria-valuenow={read?.sequence ?? 0}
        aria-valuetext={read && readout(read, now)}
        className="cursor-crosshair touch-pan-y select-none"
        onPointerMove={(event) => setCursor(nearest(event)?.position)}
        onPointerLeave={() => setCursor(undefined)}
        onClick={() => cursor !== undefined && onSelect(cursor)}
        onBlur={() => setCursor(undefined)}
        onKeyDown={(event) => {
          const index = read ? batches.indexOf(read) : batches.length - 1
          const next = {
            ArrowLeft: index - 1,
            ArrowRight: index + 1,
            PageUp: index + 10,
            PageDown: index - 10,
            Home: 0,
            End: batches.length - 1,
          }[event.key]
          if (event.key === 'Enter' && read) onSelect(read.position)
          if (next === undefined) return
          event.preventDefault()
          setCursor(batches[Math.max(0, Math.min(batches.length - 1, next))]?.position)
        }}
      >
        <svg width={width} height={height} aria-hidden="true" className="block">
          <defs>
            <pattern id="frozen-span" width="6" height="6" patternUnits="userSpaceOnUse" patternTransform="rotate(45)">
              <line x1="0" x2="0" y1="0" y2="6" className="stroke-stop" strokeWidth="1.5" strokeOpacity="0.35" />
            </pattern>
          </defs>
          {frozenSpans(entries, frozenNow).map(([from, to]) => (
            <g key={from}>
              <rect x={x(from)} width={Math.max(2, x(to) - x(from))} y={top} height={axis - top} fill="url(#frozen-span)" />
              {entries.every((entry) => entry.position !== from || entry.entry !== 'command') && (
                <text x={x(from) + 4} y={axis - 6} className="fill-stop text-11">
                  frozen
                </text>
              )}
            </g>
          ))}
          {y.ticks.map((tick) => (
            <g key={tick}>
              <line x1={left} x2={left + inner} y1={y.place(tick)} y2={y.place(tick)} className="stroke-line" />
              <text x={left - 8} y={y.place(tick) + 4} textAnchor="end" className="num fill-soft text-11">
                {tickLabel(tick)}
              </text>
            </g>
          ))}
          <Uprights entries={entries} x={x} axis={axis} edge={width} />
          <line x1={left} x2={left + inner} y1={axis} y2={axis} className="stroke-edge" />
          <path
            d={batches
              .map(
                (entry, index) =>
                  `${index === 0 ? 'M' : 'L'}${x(entry.position).toFixed(1)} ${y.place(entry.error!.before).toFixed(1)}`,
              )
              .join('')}
            fill="none"
            strokeWidth={1.25}
            strokeLinejoin="round"
            className="stroke-ink"
          />
          {batches.map((entry) => {
            const px = x(entry.position)
            if (entry.verdict === 'rejected')
              return (
                <circle key={entry.position} cx={px} cy={axis} r={3.5} className="fill-paper stroke-load" strokeWidth={1.75} />
              )
            if (entry.verdict === 'stored')
              return <line key={entry.position} x1={px} x2={px} y1={axis} y2={axis + 6} className="stroke-soft" />
            return entry.error!.after === null ? null : (
              <circle
                key={entry.position}
                cx={px}
                cy={y.place(entry.error!.after)}
                r={batches.length > 150 ? 1.6 : 2.4}
                className="fill-live"
              />
            )
          })}
          {selected !== undefined && selected >= first && (
            <path d={`M${x(selected)} ${axis + 2}l-5 9h10z`} className="fill-ink" />
          )}
          {!narrow && newest && (
            <Ends
              x={left + inner + 8}
              items={[
                { y: y.place(newest.error!.before), text: 'before step', className: 'fill-ink' },
                ...(newestAfter ? [{ y: y.place(newestAfter.error!.after!), text: 'after step', className: 'fill-live' }] : []),
              ]}
            />
          )}
          {read && cursor !== undefined && (
            <line x1={x(read.position)} x2={x(read.position)} y1={top} y2={axis} className="stroke-ink" strokeDasharray="1 2" />
          )}
          {batches.length > 0 && (
            <>
              <text x={left} y={height - 10} className="num fill-soft text-11">
                {batches[0]!.sequence}
              </text>
              <text x={left + inner} y={height - 10} textAnchor="end" className="num fill-soft text-11">
                {newest!.sequence}
              </text>
              <text x={left + inner / 2} y={height - 10} textAnchor="middle" className="fill-soft text-11">
                sequence{y.kind === 'log' ? ', error on a log axis' : ''}
              </text>
            </>
          )}
        </svg>
      </div>
      <figcaption className="flex flex-wrap gap-x-5 gap-y-1 text-12">
        <span className="num min-h-4 max-sm:min-h-8">{read && readout(read, now)}</span>
        <span className="ml-auto flex flex-wrap gap-x-4 text-soft max-sm:ml-0">
          <span className="flex items-center gap-1.5">
            <svg aria-hidden="true" width="18" height="8">
              <path d="M0 4h18" className="stroke-ink" />
            </svg>
            before step
          </span>
          <span className="flex items-center gap-1.5">
            <svg aria-hidden="true" width="8" height="8">
              <circle cx="4" cy="4" r="2.5" className="fill-live" />
            </svg>
            after an accepted step
          </span>
          <span className="flex items-center gap-1.5">
            <svg aria-hidden="true" width="9" height="9">
              <circle cx="4.5" cy="4.5" r="3.5" fill="none" className="stroke-load" strokeWidth="1.75" />
            </svg>
            rejected
          </span>
          <span className="flex items-center gap-1.5">
            <svg aria-hidden="true" width="4" height="8">
              <path d="M2 0v8" className="stroke-soft" />
            </svg>
            stored, no step
          </span>
        </span>
      </figcaption>
    </figure>
  )
}

function readout(entry: LogEntry, now: number): string {
  const { before, after } = entry.error!
  const errors =
    after === null
      ? significant(before)
      : `${significant(before)} → ${significant(after)} (${change(before, after) || 'unchanged'})`
  return `sequence ${entry.sequence}: ${entry.verdict}, error ${errors}, revision ${entry.revision}, ${relative(Date.parse(entry.at), now)}`
}

function Uprights({
  entries,
  x,
  axis,
  edge,
}: {
  entries: LogEntry[]
  x: (position: number) => number
  axis: number
  edge: number
}) {
  const marks = entries.flatMap((entry) =>
    entry.entry === 'batch' ? [] : [{ entry, words: entry.entry === 'event' ? eventWords(entry) : commandWords(entry) }],
  )
  // Two rows for the words; what fits in neither keeps its upright and can be read in the log.
  const ends = [-Infinity, -Infinity]
  return marks.map(({ entry, words }) => {
    const px = x(entry.position)
    const length = words.length * 6.2
    const turned = px + length > edge
    const row = ends.findIndex((end) => end < (turned ? px - length : px) - 4)
    if (row >= 0) ends[row] = turned ? px : px + length
    return (
      <g key={entry.position}>
        <line
          x1={px}
          x2={px}
          y1={row === 1 ? 26 : 12}
          y2={axis}
          className={entry.command === 'freeze' ? 'stroke-stop' : 'stroke-soft'}
          strokeDasharray={entry.entry === 'event' ? '4 3' : undefined}
        />
        {row >= 0 && (
          <text
            x={turned ? px - 4 : px + 4}
            y={row === 1 ? 30 : 14}
            textAnchor={turned ? 'end' : 'start'}
            className={`stroke-paper text-11 [paint-order:stroke] [stroke-width:3] ${entry.command === 'freeze' ? 'fill-stop' : 'fill-soft'}`}
          >
            {words}
          </text>
        )}
      </g>
    )
  })
}

function Ends({ x, items }: { x: number; items: { y: number; text: string; className: string }[] }) {
  const apart = items.toSorted((a, b) => a.y - b.y)
  return apart.map((item, index) => {
    const crowded = index > 0 && item.y - apart[index - 1]!.y < 14
    return (
      <text
        key={item.text}
        x={x}
        y={item.y + 4 + (crowded ? 14 - (item.y - apart[index - 1]!.y) : 0)}
        className={`text-12 ${item.className}`}
      >
        {item.text}
      </text>
    )
  })
}

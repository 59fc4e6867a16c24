import { useState } from 'react'
import { significant, tickLabel } from '../../lib/numbers.ts'
import { useWidth } from '../../lib/use-width.ts'
import { errorScale, linearScale } from './scale.ts'

interface Series {
  name: string
  points: [x: number, y: number][]
}

const dashes = ['', '6 3', '2 3', '8 3 2 3', '1 4']
const height = 260
const edge = { top: 12, right: 128, bottom: 32, left: 64 }

/** Curves against steps: told apart by line style and a name at their end, with a readout under the cursor and by arrow keys. */
export function LineChart({ series, label, xName, yName }: { series: Series[]; label: string; xName: string; yName: string }) {
  const [frame, width] = useWidth<HTMLDivElement>()
  const [at, setAt] = useState<number>()
  const drawn = series.filter((each) => each.points.length > 0)
  const xs = [...new Set(drawn.flatMap((each) => each.points.map(([x]) => x)))].sort((a, b) => a - b)
  const narrow = width < 480
  const right = narrow ? 8 : edge.right
  const x = linearScale(xs[0] ?? 0, xs.at(-1) ?? 1, edge.left, Math.max(edge.left + 1, width - right), narrow ? 4 : 8)
  const y = errorScale(
    drawn.flatMap((each) => each.points.map((point) => point[1])),
    height - edge.bottom,
    edge.top,
  )
  const readAt = at === undefined ? undefined : xs[Math.min(at, xs.length - 1)]
  const ends = spacedEnds(drawn.map((each) => y.place(each.points.at(-1)![1])))

  return (
    <figure className="m-0">
      <div
        ref={frame}
        role="slider"
        tabIndex={0}
        aria-label={`${label}; arrow keys read it step by step`}
        aria-valuemin={0}
        aria-valuemax={Math.max(0, xs.length - 1)}
        aria-valuenow={at ?? Math.max(0, xs.length - 1)}
        aria-valuetext={readout(readAt ?? xs.at(-1))}
        onPointerMove={(event) => {
          const left = event.clientX - frame.current!.getBoundingClientRect().left
          setAt(
            xs.reduce(
              (best, value, index) => (Math.abs(x.place(value) - left) < Math.abs(x.place(xs[best]!) - left) ? index : best),
              0,
            ),
          )
        }}
        onPointerLeave={() => setAt(undefined)}
        onKeyDown={(event) => {
          const last = xs.length - 1
          const next = { ArrowLeft: (at ?? last) - 1, ArrowRight: (at ?? last) + 1, Home: 0, End: last }[event.key]
          if (next === undefined) return
          event.preventDefault()
          setAt(Math.max(0, Math.min(last, next)))
        }}
      >
        <svg width={width} height={height} aria-hidden="true" className="block">
          {y.ticks.map((tick) => (
            <g key={tick}>
              <line x1={edge.left} x2={width - right} y1={y.place(tick)} y2={y.place(tick)} className="stroke-line" />
              <text x={edge.left - 8} y={y.place(tick) + 4} textAnchor="end" className="num fill-soft text-11">
                {tickLabel(tick)}
              </text>
            </g>
          ))}
          {x.ticks.filter(Number.isInteger).map((tick) => (
            <text
              key={tick}
              x={x.place(tick)}
              y={height - edge.bottom + 16}
              textAnchor="middle"
              className="num fill-soft text-11"
            >
              {tickLabel(tick)}
            </text>
          ))}
          {drawn.map((each, index) => (
            <g key={each.name}>
              <path
                d={each.points
                  .map(([px, py], point) => `${point === 0 ? 'M' : 'L'}${x.place(px).toFixed(1)} ${y.place(py).toFixed(1)}`)
                  .join('')}
                fill="none"
                strokeWidth={1.5}
                strokeDasharray={dashes[index % dashes.length]}
                className={index === 0 ? 'stroke-live' : 'stroke-ink'}
              />
              {!narrow && (
                <text x={width - right + 8} y={ends[index]! + 4} className="fill-ink text-12">
                  {each.name}
                </text>
              )}
            </g>
          ))}
          {readAt !== undefined && (
            <line
              x1={x.place(readAt)}
              x2={x.place(readAt)}
              y1={edge.top}
              y2={height - edge.bottom}
              className="stroke-ink"
              strokeDasharray="1 2"
            />
          )}
        </svg>
      </div>
      <figcaption className="flex flex-wrap gap-x-6 text-12 text-soft">
        <span>
          {yName} against {xName}
        </span>
        <span className="num">{readout(readAt ?? xs.at(-1))}</span>
      </figcaption>
    </figure>
  )

  function readout(value: number | undefined): string {
    if (value === undefined) return ''
    const parts = drawn.map((each) => {
      const point = each.points.findLast(([px]) => px <= value)
      return point && `${each.name} ${significant(point[1])}`
    })
    return [`${xName} ${tickLabel(value)}`, ...parts.filter(Boolean)].join(', ')
  }
}

/** Labels at the ends of lines, pushed apart so that none covers another. */
function spacedEnds(wanted: number[]): number[] {
  const order = wanted.map((_, index) => index).sort((a, b) => wanted[a]! - wanted[b]!)
  const placed = [...wanted]
  for (let step = 1; step < order.length; step++) {
    const above = placed[order[step - 1]!]!
    placed[order[step]!] = Math.max(placed[order[step]!]!, above + 15)
  }
  return placed
}

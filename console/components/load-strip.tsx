import { significant } from '../lib/numbers.ts'
import { robotTime } from '../lib/times.ts'
import { useWidth } from '../lib/use-width.ts'
import { highLoad } from './load-bar.tsx'

interface LoadStripProps {
  joints: { name: string; unit: string; limit: number }[]
  /** s, robot's clock */
  time: number[]
  /** rows × joints */
  predicted: number[][]
  measured: number[][]
  /** The instant that is looked at. */
  row: number
  onRow: (row: number) => void
}

const lane = 34
const label = 120
const scale = 76
const foot = 20

function shortened(name: string, length: number): string {
  return name.length > length ? `${name.slice(0, length - 1)}…` : name
}

/**
 * Load bars over time: time across, joint down. The area from zero is predicted, the line is measured; each lane states its own scale,
 * since most motions stay far below the limits.
 */
export function LoadStrip({ joints, time, predicted, measured, row, onRow }: LoadStripProps) {
  const [frame, width] = useWidth<HTMLDivElement>()
  const narrow = width < 480
  const left = narrow ? 80 : label
  const right = narrow ? 0 : scale
  const inner = Math.max(1, width - left - right)
  const first = time[0]!
  const length = time.at(-1)! - first || 1
  const x = (index: number) => left + ((time[index]! - first) / length) * inner
  const height = joints.length * lane + foot
  const move = (step: number) => onRow(Math.max(0, Math.min(time.length - 1, row + step)))

  return (
    <div
      ref={frame}
      role="slider"
      tabIndex={0}
      aria-label="Instant of the batch"
      aria-valuemin={0}
      aria-valuemax={time.length - 1}
      aria-valuenow={row}
      aria-valuetext={`row ${row + 1} of ${time.length}, ${robotTime(time[row]!)} s`}
      className="cursor-crosshair touch-pan-y select-none"
      onKeyDown={(event) => {
        const steps: Record<string, number> = {
          ArrowLeft: -1,
          ArrowDown: -1,
          ArrowRight: 1,
          ArrowUp: 1,
          PageDown: -10,
          PageUp: 10,
          Home: -Infinity,
          End: Infinity,
        }
        const step = steps[event.key]
        if (step === undefined) return
        event.preventDefault()
        move(step)
      }}
      onPointerMove={(event) => event.pointerType === 'mouse' && onRow(nearest(event))}
      onPointerDown={(event) => onRow(nearest(event))}
    >
      <svg width={width} height={height} aria-hidden="true" className="block overflow-visible">
        {joints.map((joint, index) => {
          const middle = index * lane + lane / 2
          const most = Math.max(
            ...predicted.map((values) => Math.abs(values[index]!)),
            ...measured.map((values) => Math.abs(values[index]!)),
            joint.limit * 1e-3,
          )
          const y = (value: number) => middle - (value / most) * (lane / 2 - 3)
          const high = joint.limit * highLoad
          const outline = (rows: number[][]) =>
            rows.map((values, at) => `${at === 0 ? 'M' : 'L'}${x(at).toFixed(1)} ${y(values[index]!).toFixed(1)}`).join('')
          return (
            <g key={joint.name}>
              <text x={0} y={middle + 4} className="fill-ink text-12">
                {narrow ? shortened(joint.name, 11) : shortened(joint.name, 18)}
              </text>
              <line x1={left} x2={left + inner} y1={middle} y2={middle} className="stroke-line" />
              <path
                d={`${outline(predicted)}L${x(time.length - 1)} ${middle}L${left} ${middle}Z`}
                className="fill-live"
                fillOpacity={0.28}
              />
              <path d={outline(predicted)} fill="none" className="stroke-live" strokeWidth={1} />
              <path d={outline(measured)} fill="none" className="stroke-ink" strokeWidth={1.25} />
              {most > high &&
                [-high, high].map((value) => (
                  <line
                    key={value}
                    x1={left}
                    x2={left + inner}
                    y1={y(value)}
                    y2={y(value)}
                    className="stroke-load"
                    strokeDasharray="2 3"
                  />
                ))}
              {!narrow && (
                <text x={width} y={middle + 4} textAnchor="end" className="num fill-soft text-11">
                  ±{significant(most)} {joint.unit}
                </text>
              )}
            </g>
          )
        })}
        <line x1={x(row)} x2={x(row)} y1={0} y2={joints.length * lane} className="stroke-ink" strokeDasharray="1 2" />
        <text x={left} y={height - 4} className="num fill-soft text-11">
          {robotTime(first)} s
        </text>
        <text x={left + inner} y={height - 4} textAnchor="end" className="num fill-soft text-11">
          {robotTime(time.at(-1)!)} s
        </text>
      </svg>
    </div>
  )

  function nearest(event: React.PointerEvent): number {
    const at = first + ((event.clientX - frame.current!.getBoundingClientRect().left - left) / inner) * length
    let best = 0
    for (let index = 1; index < time.length; index++) if (Math.abs(time[index]! - at) < Math.abs(time[best]! - at)) best = index
    return best
  }
}

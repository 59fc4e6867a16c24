import { significant } from '../lib/numbers.ts'

export interface Load {
  joint: string
  unit: string
  /** Largest torque the joint may see, above 0. */
  limit: number
  predicted?: number | null
  measured?: number | null
}

/** Past this share of the limit a torque asks for attention. */
export const highLoad = 0.8
/** The track reaches a little beyond the limits, so that a measured torque past one is still seen. */
const reach = 1.08

export function isClamped(load: Load): boolean {
  return load.predicted != null && Math.abs(load.predicted) >= load.limit * (1 - 1e-6)
}

function place(value: number, limit: number): number {
  const share = Math.max(-reach, Math.min(reach, value / limit))
  return 50 + (share / reach) * 50
}

function spread(from: number, to: number): { left: string; width: string } {
  return { left: `${Math.min(from, to)}%`, width: `${Math.abs(to - from)}%` }
}

/** What the bar shows, in words. */
export function loadInWords(load: Load): string {
  const torque = (value: number) => `${significant(value)} ${load.unit}`
  return [
    `${load.joint}:`,
    load.predicted != null && `predicted ${torque(load.predicted)}${isClamped(load) ? ', clamped' : ''},`,
    load.measured != null && `measured ${torque(load.measured)},`,
    `limit ${torque(load.limit)}`,
  ]
    .filter(Boolean)
    .join(' ')
}

/**
 * One joint's torque at one instant: zero in the middle, ticks at the torque limits, predicted as a bar from zero, measured as an
 * upright mark; hatched past 80 % of the limit, capped where it was clamped.
 */
export function LoadBar({ load, scale = false }: { load: Load; scale?: boolean }) {
  const zero = place(0, load.limit)
  const clamped = isClamped(load)
  const sign = Math.sign(load.predicted ?? 0)
  const calm = load.predicted == null ? 0 : sign * Math.min(Math.abs(load.predicted), load.limit * highLoad)
  const words = loadInWords(load)
  return (
    <div className="min-w-24">
      <div role="img" aria-label={words} title={words} className="relative h-4">
        <span className="absolute inset-x-0 top-1/2 h-0.5 -translate-y-1/2 bg-line" />
        {[-1, 1].map((side) => (
          <span
            key={side}
            className="absolute top-1/2 h-2.5 w-px -translate-x-1/2 -translate-y-1/2 bg-soft"
            style={{ left: `${place(side * load.limit, load.limit)}%` }}
          />
        ))}
        {load.predicted != null && (
          <>
            <span className="absolute top-1/2 h-2 -translate-y-1/2 bg-live" style={spread(zero, place(calm, load.limit))} />
            {Math.abs(load.predicted) > Math.abs(calm) && (
              <span
                className="hatch-load absolute top-1/2 h-2 -translate-y-1/2"
                style={spread(place(calm, load.limit), place(load.predicted, load.limit))}
              />
            )}
            {clamped && (
              <span
                className="absolute top-1/2 h-4 w-1 -translate-x-1/2 -translate-y-1/2 bg-stop"
                style={{ left: `${place(sign * load.limit, load.limit)}%` }}
              />
            )}
          </>
        )}
        <span className="absolute top-1/2 h-3 w-px -translate-x-1/2 -translate-y-1/2 bg-soft" style={{ left: `${zero}%` }} />
        {clamped && (
          // In the empty half, so that the row keeps its height when a joint reaches its limit.
          <span
            className={`absolute top-1/2 -translate-y-1/2 bg-paper px-1 text-12 font-semibold text-stop ${sign > 0 ? 'right-1/2 mr-1' : 'left-1/2 ml-1'}`}
          >
            clamped
          </span>
        )}
        {load.measured != null && (
          <span
            className="absolute top-1/2 h-4 w-0.5 -translate-x-1/2 -translate-y-1/2 bg-ink"
            style={{ left: `${place(load.measured, load.limit)}%` }}
          />
        )}
      </div>
      {scale && (
        <div aria-hidden="true" className="num relative h-4 text-11 text-soft">
          {[-1, 0, 1].map((side) => (
            <span
              key={side}
              className={`absolute whitespace-nowrap ${side < 0 ? '' : '-translate-x-1/2'} ${side > 0 ? '!-translate-x-full' : ''}`}
              style={{ left: side < 0 ? 0 : side > 0 ? '100%' : `${zero}%` }}
            >
              {side === 0 ? '0' : significant(side * load.limit)}
            </span>
          ))}
        </div>
      )}
    </div>
  )
}

/** How to read a load bar, once per page. */
export function LoadBarKey() {
  return (
    <ul aria-label="How to read the load bars" className="flex flex-wrap items-center gap-x-4 gap-y-1 text-12 text-soft">
      <li className="flex items-center gap-1.5">
        <span aria-hidden="true" className="h-2 w-5 bg-live" /> predicted
      </li>
      <li className="flex items-center gap-1.5">
        <span aria-hidden="true" className="h-4 w-0.5 bg-ink" /> measured
      </li>
      <li className="flex items-center gap-1.5">
        <span aria-hidden="true" className="hatch-load h-2 w-5" /> past 80 % of the limit
      </li>
      <li className="flex items-center gap-1.5">
        <span aria-hidden="true" className="h-2.5 w-px bg-soft" /> zero, limits
      </li>
    </ul>
  )
}

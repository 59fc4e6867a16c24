import { grouped, significant } from '../lib/numbers.ts'

interface QuantityProps {
  value: number | null | undefined
  unit?: string
  digits?: number
  /** A count, not a measurement. */
  whole?: boolean
  className?: string
  /** What stands where there is no value. */
  missing?: string
}

/** A number with its unit, one step smaller and lighter; the full value on hover. */
export function Quantity({ value, unit, digits = 3, whole = false, className = '', missing = '–' }: QuantityProps) {
  if (value === null || value === undefined) return <span className={`num text-soft ${className}`}>{missing}</span>
  return (
    <data
      value={value}
      title={unit === undefined ? String(value) : `${value} ${unit}`}
      className={`whitespace-nowrap ${className}`}
    >
      {whole ? grouped(value) : significant(value, digits)}
      {unit !== undefined && <span className="ml-[0.4em] text-[0.857em] text-soft">{unit}</span>}
    </data>
  )
}

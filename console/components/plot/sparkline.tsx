import { errorScale } from './scale.ts'

/** How a value went, small; on a log scale where it spans decades. The label says it in words. */
export function Sparkline({
  values,
  label,
  width = 120,
  height = 24,
}: {
  values: number[]
  label: string
  width?: number
  height?: number
}) {
  if (values.length < 2)
    return <span className="text-12 text-soft">{values.length === 0 ? 'no batch yet' : 'one batch so far'}</span>
  const scale = errorScale(values, height - 2, 2)
  const x = (index: number) => 1 + (index / (values.length - 1)) * (width - 6)
  const last = values.length - 1
  return (
    <svg
      viewBox={`0 0 ${width} ${height}`}
      width={width}
      height={height}
      role="img"
      aria-label={label}
      className="block max-w-full"
    >
      <path
        d={values
          .map((value, index) => `${index === 0 ? 'M' : 'L'}${x(index).toFixed(1)} ${scale.place(value).toFixed(1)}`)
          .join('')}
        fill="none"
        className="stroke-ink"
        strokeWidth={1.2}
        strokeLinejoin="round"
      />
      <circle cx={x(last)} cy={scale.place(values[last]!)} r={2.5} className="fill-ink" />
    </svg>
  )
}

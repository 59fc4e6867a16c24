/** How far a job is, 0 to 1. */
export function ProgressBar({ value, label, ended = false }: { value: number; label: string; ended?: boolean }) {
  const share = Math.round(value * 100)
  return (
    <div
      role="progressbar"
      aria-label={label}
      aria-valuemin={0}
      aria-valuemax={100}
      aria-valuenow={share}
      className="h-1.5 w-full bg-line"
    >
      <div className={`h-full transition-[width] ${ended ? 'bg-edge' : 'bg-live'}`} style={{ width: `${share}%` }} />
    </div>
  )
}

import type { ReactNode } from 'react'
import { failureOf } from '../lib/failures.ts'
import { Button } from './button.tsx'
import { Icon } from './icon.tsx'

/** Stands where something is being loaded, in about its size, so that nothing jumps when it comes. */
export function Skeleton({ className = 'h-5 w-32' }: { className?: string }) {
  return <span aria-hidden="true" className={`skeleton block ${className}`} />
}

export function SkeletonRows({ rows = 5, label = 'Loading' }: { rows?: number; label?: string }) {
  return (
    <div role="status" aria-label={label} className="divide-y divide-line border-y border-line">
      {Array.from({ length: rows }, (_, row) => (
        <div key={row} className="flex items-center gap-6 py-3">
          <Skeleton className="h-4 w-40" />
          <Skeleton className="h-4 w-24" />
          <Skeleton className="h-4 grow" />
        </div>
      ))}
    </div>
  )
}

/** What went wrong, where, and a way on. */
export function Failed({ error, retry, what }: { error: unknown; retry?: () => void; what: string }) {
  const failure = failureOf(error)
  return (
    <div role="alert" className="border-l-4 border-stop py-1 pl-4">
      <p className="text-16 font-semibold">{what}</p>
      <p className="mt-1">
        {failure.title}. {failure.detail}
      </p>
      <Faults faults={failure.faults.filter((fault) => !failure.detail.includes(fault.detail))} />
      {failure.requestId !== undefined && (
        <p className="mt-1 text-12 text-soft">
          Request <code>{failure.requestId}</code>
        </p>
      )}
      {retry && (
        <Button className="mt-3" onClick={retry}>
          Try again
        </Button>
      )}
    </div>
  )
}

/** The same inside a form or a dialog. */
export function InlineFailure({ error }: { error: unknown }) {
  const failure = failureOf(error)
  return (
    <div role="alert" className="border-l-4 border-stop py-0.5 pl-3 text-14">
      <p className="font-semibold text-stop">{failure.title}</p>
      <p>{failure.detail}</p>
      <Faults faults={failure.faults.filter((fault) => !failure.detail.includes(fault.detail))} />
    </div>
  )
}

function Faults({ faults }: { faults: { where: string; detail: string }[] }) {
  if (faults.length === 0) return null
  return (
    <ul className="mt-1 list-disc pl-5">
      {faults.map((fault) => (
        <li key={fault.where + fault.detail}>
          {fault.where !== '' && <code className="text-12">{fault.where}</code>} {fault.detail}
        </li>
      ))}
    </ul>
  )
}

/** Nothing here yet, and what to do next. */
export function Empty({ title, children, action }: { title: string; children?: ReactNode; action?: ReactNode }) {
  return (
    <div className="border-y border-line py-10">
      <p className="text-16 font-semibold">{title}</p>
      {children && <div className="mt-1 max-w-prose text-soft">{children}</div>}
      {action && <div className="mt-4">{action}</div>}
    </div>
  )
}

/** A short caution in its place. */
export function Caution({ children }: { children: ReactNode }) {
  return (
    <p className="flex max-w-prose gap-2 text-12 text-soft">
      <Icon name="attention" className="mt-px text-load" />
      <span>{children}</span>
    </p>
  )
}

import type { ReactNode } from 'react'
import { useEffect } from 'react'
import { TextLink } from './button.tsx'

interface PageProps {
  title: string
  /** Beside the title: its state. */
  state?: ReactNode
  /** The way back up. */
  above?: { to: string; label: string }
  facts?: ReactNode
  actions?: ReactNode
  children: ReactNode
}

/** A page: one title line with state and actions, then its content. */
export function Page({ title, state, above, facts, actions, children }: PageProps) {
  useEffect(() => {
    document.title = `${title} · Heftwise`
  }, [title])
  return (
    <div className="mx-auto w-full max-w-[80rem] px-4 pt-5 pb-16 md:px-8">
      {above && (
        <p className="mb-1 text-12 text-soft">
          <TextLink to={above.to}>{above.label}</TextLink>
        </p>
      )}
      <div className="flex flex-wrap items-center gap-x-6 gap-y-3">
        <div className="flex min-w-0 grow flex-wrap items-baseline gap-x-4 gap-y-1">
          <h1 className="min-w-0 text-28 break-words">{title}</h1>
          {state}
        </div>
        {actions && <div className="flex flex-wrap gap-2">{actions}</div>}
      </div>
      {facts && <div className="mt-2 text-soft">{facts}</div>}
      <div className="mt-6 flex flex-col gap-8">{children}</div>
    </div>
  )
}

export function Section({
  title,
  note,
  actions,
  children,
  className = '',
}: {
  title: string
  note?: ReactNode
  actions?: ReactNode
  children: ReactNode
  className?: string
}) {
  return (
    <section aria-label={title} className={`min-w-0 ${className}`}>
      <div className="mb-2 flex flex-wrap items-baseline gap-x-3 gap-y-1">
        <h2 className="text-16">{title}</h2>
        {note && <p className="text-12 text-soft">{note}</p>}
        {actions && <div className="ml-auto flex flex-wrap items-center gap-3">{actions}</div>}
      </div>
      {children}
    </section>
  )
}

/** Names and values in two columns that wrap. */
export function Facts({ items }: { items: [name: string, value: ReactNode][] }) {
  return (
    <dl className="grid content-start grid-cols-[auto_1fr] gap-x-4 gap-y-1.5">
      {items.map(([name, value]) => (
        <div key={name} className="contents">
          <dt className="text-soft">{name}</dt>
          <dd className="min-w-0 break-words">{value}</dd>
        </div>
      ))}
    </dl>
  )
}

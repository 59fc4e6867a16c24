import type { ComponentProps, ReactNode } from 'react'
import { Link } from 'react-router-dom'
import { Icon, type IconName } from './icon.tsx'
import { Tooltip } from './tooltip.tsx'

type Look = 'primary' | 'plain' | 'stop' | 'quiet'

const looks: Record<Look, string> = {
  primary:
    'bg-live text-on-live border-live hover:brightness-110 aria-disabled:bg-transparent aria-disabled:text-soft aria-disabled:border-line',
  plain:
    'border-edge text-ink hover:border-ink hover:bg-sunken aria-disabled:text-soft aria-disabled:border-line aria-disabled:hover:bg-transparent',
  stop: 'border-stop text-stop hover:bg-stop hover:text-on-stop aria-disabled:text-soft aria-disabled:border-line aria-disabled:hover:bg-transparent',
  quiet: 'border-transparent text-ink hover:bg-sunken aria-disabled:text-soft aria-disabled:hover:bg-transparent',
}

const shape =
  'inline-flex min-h-8 items-center justify-center gap-2 rounded-2 border px-3 py-1 text-14 font-semibold whitespace-nowrap aria-disabled:cursor-not-allowed max-md:min-h-10 max-sm:px-2'

interface ButtonProps extends Omit<ComponentProps<'button'>, 'disabled'> {
  look?: Look
  icon?: IconName
  /** Why it can't be pressed now; shown on hover and focus, read out as its description. */
  blocked?: string | undefined
  pending?: boolean
}

export function Button({
  look = 'plain',
  icon,
  blocked,
  pending = false,
  children,
  className = '',
  onClick,
  type = 'button',
  ...rest
}: ButtonProps) {
  const button = (
    <button
      {...rest}
      type={type}
      aria-disabled={blocked !== undefined || pending || undefined}
      aria-busy={pending || undefined}
      className={`${shape} ${looks[look]} ${className}`}
      onClick={(event) => {
        if (blocked === undefined && !pending) onClick?.(event)
        else event.preventDefault()
      }}
    >
      {icon && <Icon name={icon} />}
      {children}
    </button>
  )
  return blocked === undefined ? button : <Tooltip text={blocked}>{button}</Tooltip>
}

/** A sign without a word on it, whose word is in `label`. */
export function IconButton({
  label,
  icon,
  className = '',
  ...rest
}: { label: string; icon: IconName } & Omit<ComponentProps<'button'>, 'children'>) {
  return (
    <button
      type="button"
      {...rest}
      aria-label={label}
      title={label}
      className={`inline-grid size-8 place-items-center rounded-2 text-soft hover:bg-sunken hover:text-ink max-md:size-10 ${className}`}
    >
      <Icon name={icon} />
    </button>
  )
}

export function ButtonLink({
  to,
  look = 'plain',
  icon,
  children,
}: {
  to: string
  look?: Look
  icon?: IconName
  children: ReactNode
}) {
  return (
    <Link to={to} className={`${shape} ${looks[look]}`}>
      {icon && <Icon name={icon} />}
      {children}
    </Link>
  )
}

/** A link in running text or a table. */
export function TextLink({ to, children, className = '' }: { to: string; children: ReactNode; className?: string }) {
  return (
    <Link
      to={to}
      className={`underline decoration-edge decoration-1 underline-offset-3 hover:decoration-2 hover:decoration-ink ${className}`}
    >
      {children}
    </Link>
  )
}

/** A small switch between ways of looking. */
export function Toggle({ pressed, onPress, children }: { pressed: boolean; onPress: () => void; children: ReactNode }) {
  return (
    <button
      type="button"
      aria-pressed={pressed}
      onClick={onPress}
      className="min-h-7 rounded-2 border border-line px-2 text-12 hover:border-ink aria-pressed:border-ink aria-pressed:bg-ink aria-pressed:text-paper max-md:min-h-9"
    >
      {children}
    </button>
  )
}

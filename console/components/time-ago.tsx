import { exact, relative, useNow } from '../lib/times.ts'

/** When something was, relative, with the exact moment on hover. */
export function TimeAgo({ at, className = '' }: { at: string; className?: string }) {
  const now = useNow()
  return (
    <time dateTime={at} title={exact(at)} className={`whitespace-nowrap ${className}`}>
      {relative(Date.parse(at), now)}
    </time>
  )
}

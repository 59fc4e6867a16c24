import { ConnectionError, ProblemError, TimeoutError } from './errors.ts'

export interface RetryPolicy {
  /** How often a request is repeated at most. */
  readonly attempts: number
  /** The first pause; each further one doubles. */
  readonly baseMs: number
  readonly longestMs: number
}

export const defaultRetry: RetryPolicy = { attempts: 3, baseMs: 100, longestMs: 5_000 }

/**
 * How long to wait before the next try, or undefined when trying again makes no sense.
 *
 * 429 and 503 are repeated after what `Retry-After` says; 502, 504, a broken connection and a time-out after a pause that
 * doubles, with full jitter so that many controllers don't come back at the same moment. Everything else is an answer.
 */
export function pauseBefore(attempt: number, error: unknown, policy: RetryPolicy, random: () => number): number | undefined {
  if (attempt > policy.attempts) return undefined
  const doubled = Math.min(policy.longestMs, policy.baseMs * 2 ** (attempt - 1))
  if (error instanceof ProblemError) {
    if (error.status === 429 || error.status === 503) return (error.retryAfterMs ?? 0) + random() * doubled
    return error.status === 502 || error.status === 504 ? random() * doubled : undefined
  }
  return error instanceof ConnectionError || error instanceof TimeoutError ? random() * doubled : undefined
}

/** `Retry-After` in milliseconds: seconds or an HTTP date (RFC 9110, section 10.2.3). */
export function parseRetryAfter(value: string | null, now: number): number | undefined {
  if (value === null) return undefined
  if (/^\d+$/.test(value)) return Number(value) * 1000
  const at = Date.parse(value)
  return Number.isNaN(at) ? undefined : Math.max(0, at - now)
}

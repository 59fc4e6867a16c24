import { slugOfType, type ProblemSlug } from '../shared/contract/problems.ts'
import type { Schemas } from './wire.ts'

/** The service refused or failed, and said why (RFC 9457). */
export class ProblemError extends Error {
  override readonly name = 'ProblemError'
  /** The cause, one of a fixed list, or undefined where something between you and the service answered instead. */
  readonly slug: ProblemSlug | undefined
  readonly status: number
  readonly problem: Schemas['Problem'] | undefined
  /** From `Retry-After`, where the answer had one. */
  readonly retryAfterMs: number | undefined
  readonly requestId: string | undefined

  constructor(status: number, problem: Schemas['Problem'] | undefined, more: { retryAfterMs?: number; requestId?: string }) {
    super(problem ? `${problem.title}: ${problem.detail}` : `The server answered ${status} without saying why.`)
    this.status = status
    this.problem = problem
    this.slug = problem && slugOfType(problem.type)
    this.retryAfterMs = more.retryAfterMs
    this.requestId = problem?.request_id ?? more.requestId
  }
}

/** No answer came: the service could not be reached, or the connection broke. */
export class ConnectionError extends Error {
  override readonly name = 'ConnectionError'
}

/** No answer came in time. The request may or may not have taken effect. */
export class TimeoutError extends Error {
  override readonly name = 'TimeoutError'
}

/** True for a ProblemError, of the given cause if one is given. */
export function isProblem(error: unknown, slug?: ProblemSlug): error is ProblemError {
  return error instanceof ProblemError && (slug === undefined || error.slug === slug)
}

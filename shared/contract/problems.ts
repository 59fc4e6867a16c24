/** One row per cause of a refusal. openapi.yaml's `ProblemType` lists the same types; a test holds the two together. */
const table = {
  'malformed-body': [400, 'The body could not be read'],
  'invalid-request': [422, 'The request does not fit the contract'],
  'unsupported-media-type': [415, 'This body type is not understood'],
  'not-acceptable': [406, 'None of the accepted types can be answered'],
  'body-too-large': [413, 'The body is too large'],
  unauthenticated: [401, 'Credentials are needed'],
  'malformed-credentials': [400, 'The credentials could not be read'],
  'invalid-token': [401, 'The key is unknown, expired or revoked'],
  'insufficient-scope': [403, 'The key lacks a scope'],
  'role-not-allowed': [403, 'Your role may not do this'],
  'csrf-token-missing': [403, 'The CSRF token is missing or outdated'],
  'sign-in-failed': [401, 'E-mail and password do not match'],
  'password-unsuitable': [422, 'The new password is not suitable'],
  'not-found': [404, 'There is no such thing here'],
  'method-not-allowed': [405, 'This path does not take that method'],
  'name-taken': [409, 'The name is taken'],
  archived: [409, 'It has been archived'],
  'wrong-joints': [422, 'The joints are not those of the arm'],
  'no-live-version': [409, 'The model has no live version'],
  'nothing-to-roll-back-to': [409, 'There is no formerly live version to roll back to'],
  'already-live': [409, 'This version is live already'],
  'precondition-required': [428, 'If-Match is needed'],
  'precondition-failed': [412, 'It has changed since you looked'],
  'idempotency-in-flight': [409, 'The first request with this Idempotency-Key is still running'],
  'idempotency-mismatch': [422, 'This Idempotency-Key was used with another body'],
  'secret-not-repeated': [409, 'A secret is shown only once'],
  'sequence-gap': [409, 'The sequence has a gap'],
  'sequence-mismatch': [422, 'This sequence is stored with other content'],
  'time-not-rising': [422, 'Time does not rise'],
  'adaptation-ended': [409, 'The adaptation has ended'],
  'adaptation-state': [409, 'The adaptation is not in the state this needs'],
  'loss-of-another-base': [422, 'The loss belongs to another base version'],
  'setting-refused': [422, 'The setting is not possible here'],
  'rigid-body-required': [422, 'A rigid-body description is needed'],
  'revision-not-reached': [503, 'The revision is not served yet'],
  'held-elsewhere': [503, 'Another server process holds this adaptation'],
  'not-ready': [503, 'The service is not ready'],
  'rate-limited': [429, 'Too many requests'],
  'upload-incomplete': [400, 'The upload broke off'],
  'recording-unreadable': [422, 'The recording cannot be used'],
  'recordings-unsuitable': [422, 'These recordings do not serve this job'],
  'artefact-unreadable': [422, 'The snapshot cannot be imported'],
  'job-ended': [409, 'The job has ended'],
  'key-inactive': [409, 'The key is not active'],
  internal: [500, 'Something went wrong on our side'],
} as const satisfies Record<string, readonly [number, string]>

export type ProblemSlug = keyof typeof table

const prefix = 'tag:heftwise.invalid,2026:'

export interface ProblemKind {
  readonly slug: ProblemSlug
  /** A tag URI (RFC 4151): stable, unique, not to be fetched. */
  readonly type: string
  readonly status: number
  readonly title: string
}

export const problemKinds: readonly ProblemKind[] = Object.entries(table).map(([slug, [status, title]]) => ({
  slug: slug as ProblemSlug,
  type: prefix + slug,
  status,
  title,
}))

export function problemKind(slug: ProblemSlug): ProblemKind {
  const [status, title] = table[slug]
  return { slug, type: prefix + slug, status, title }
}

export function slugOfType(type: string): ProblemSlug | undefined {
  const slug = type.startsWith(prefix) ? type.slice(prefix.length) : ''
  return Object.hasOwn(table, slug) ? (slug as ProblemSlug) : undefined
}

/** Where in a request a fault lies. */
export interface Fault {
  /** A JSON pointer (RFC 6901) into the body, or a parameter's name. */
  readonly pointer?: string
  readonly row?: number
  readonly joint?: string
  readonly detail: string
}

/**
 * A refusal: something the caller can put right. `detail` names the thing, the value found, what was expected and the next move.
 */
export class Refusal extends Error {
  readonly kind: ProblemKind
  readonly errors: readonly Fault[]
  readonly headers: Readonly<Record<string, string>>
  readonly extra: Readonly<Record<string, unknown>>

  constructor(
    slug: ProblemSlug,
    detail: string,
    more: { errors?: readonly Fault[]; headers?: Record<string, string>; extra?: Record<string, unknown>; cause?: unknown } = {},
  ) {
    super(detail, more.cause === undefined ? undefined : { cause: more.cause })
    this.name = 'Refusal'
    this.kind = problemKind(slug)
    this.errors = more.errors ?? []
    this.headers = more.headers ?? {}
    this.extra = more.extra ?? {}
  }
}

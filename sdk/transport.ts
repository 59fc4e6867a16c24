import type { Schemas } from './wire.ts'
import { ConnectionError, ProblemError, TimeoutError } from './errors.ts'
import { defaultRetry, parseRetryAfter, pauseBefore, type RetryPolicy } from './retry.ts'

export interface TransportOptions {
  /** Where the service answers, for example `http://127.0.0.1:8080`. In a browser on the same origin: ''. */
  url: string
  /** An API key. Leave it out where `headers` or a session cookie identify the caller. */
  key?: string
  /** Added to every request, asked anew each time. */
  headers?: () => Record<string, string>
  /** How long a request may take, each try by itself. Default 10,000 ms. */
  timeoutMs?: number
  retry?: Partial<RetryPolicy>
  fetch?: typeof fetch
}

export interface CallOptions {
  signal?: AbortSignal
  timeoutMs?: number
}

export interface Call extends CallOptions {
  method: 'GET' | 'POST' | 'PUT' | 'PATCH' | 'DELETE'
  path: string
  query?: object
  body?: unknown
  headers?: Record<string, string>
  /** A repeat changes nothing more, so it may be tried again. GET always is. */
  repeatable?: boolean
}

/** An answer with what its headers said. */
export interface Answer<T> {
  body: T
  status: number
  etag: string | undefined
}

/** Sends requests, reads answers, repeats what is safe to repeat. */
export class Transport {
  readonly #options: TransportOptions
  readonly #retry: RetryPolicy

  constructor(options: TransportOptions) {
    this.#options = options
    this.#retry = { ...defaultRetry, ...options.retry }
  }

  /** @throws {ProblemError | ConnectionError | TimeoutError} and the signal's reason when it aborts */
  async send<T>(call: Call): Promise<Answer<T>> {
    for (let attempt = 1; ; attempt++) {
      try {
        const response = await this.open(call)
        const body = response.status === 204 || response.status === 304 ? undefined : await readJson(response)
        return { body: body as T, status: response.status, etag: response.headers.get('etag') ?? undefined }
      } catch (error) {
        call.signal?.throwIfAborted()
        const repeatable = call.method === 'GET' || call.repeatable === true
        const pause = repeatable ? pauseBefore(attempt, error, this.#retry, Math.random) : undefined
        if (pause === undefined) throw error
        await sleep(pause, call.signal)
      }
    }
  }

  /** One try; the response is checked for its status, its body is the caller's to read. */
  async open(call: Call): Promise<Response> {
    const timeout = AbortSignal.timeout(call.timeoutMs ?? this.#options.timeoutMs ?? 10_000)
    const isForm = call.body instanceof FormData
    let response: Response
    try {
      response = await (this.#options.fetch ?? fetch)(this.#options.url + call.path + queryString(call.query), {
        method: call.method,
        signal: call.signal ? AbortSignal.any([call.signal, timeout]) : timeout,
        credentials: 'same-origin',
        headers: {
          accept: 'application/json',
          ...(call.body !== undefined && !isForm && { 'content-type': 'application/json' }),
          ...(this.#options.key !== undefined && { authorization: `Bearer ${this.#options.key}` }),
          ...this.#options.headers?.(),
          ...call.headers,
        },
        body: isForm ? (call.body as FormData) : call.body === undefined ? undefined : JSON.stringify(call.body),
      })
    } catch (cause) {
      call.signal?.throwIfAborted()
      throw timeout.aborted
        ? new TimeoutError(`${call.method} ${call.path}: no answer in time. Ask for its state before you repeat it.`, { cause })
        : new ConnectionError(`${call.method} ${call.path}: ${this.#options.url || 'the service'} could not be reached.`, { cause })
    }
    if (response.ok || response.status === 304) return response
    throw await problemOf(response)
  }
}

async function problemOf(response: Response): Promise<ProblemError> {
  const isProblem = response.headers.get('content-type')?.startsWith('application/problem+json') ?? false
  const problem = isProblem ? ((await readJson(response)) as Schemas['Problem']) : undefined
  return new ProblemError(response.status, problem, {
    retryAfterMs: parseRetryAfter(response.headers.get('retry-after'), Date.now()),
    requestId: response.headers.get('x-request-id') ?? undefined,
  })
}

async function readJson(response: Response): Promise<unknown> {
  try {
    return await response.json()
  } catch (cause) {
    throw new ConnectionError('The answer broke off or was not JSON.', { cause })
  }
}

function queryString(query: object | undefined): string {
  const parameters = new URLSearchParams()
  for (const [name, value] of Object.entries(query ?? {})) if (value !== undefined) parameters.set(name, String(value))
  const text = parameters.toString()
  return text && `?${text}`
}

/** @throws the signal's reason when it aborts */
export function sleep(ms: number, signal: AbortSignal | undefined): Promise<void> {
  return new Promise((resolve, reject) => {
    const stop = () => {
      clearTimeout(timer)
      reject(signal!.reason as Error)
    }
    const timer = setTimeout(() => {
      signal?.removeEventListener('abort', stop)
      resolve()
    }, ms)
    signal?.addEventListener('abort', stop, { once: true })
  })
}

import { expect } from 'vitest'
import { loadContract } from '../../server/middleware/contract-document.ts'
import type { ContractDocument, Method } from '../../server/middleware/contract-document.ts'
import { faultOf } from '../../server/middleware/fault-text.ts'

export interface Answer<Body = any> {
  readonly status: number
  readonly headers: Headers
  /** Parsed JSON; text of other kinds; undefined when empty. */
  readonly body: Body
}

export interface SendOptions {
  headers?: Record<string, string>
  /** Sent as JSON, unless it is a string, bytes or a form. */
  body?: unknown
}

export interface ApiClient {
  send<Body = any>(method: string, path: string, options?: SendOptions): Promise<Answer<Body>>
  get<Body = any>(path: string, options?: SendOptions): Promise<Answer<Body>>
  post<Body = any>(path: string, body?: unknown, options?: SendOptions): Promise<Answer<Body>>
  put<Body = any>(path: string, body?: unknown, options?: SendOptions): Promise<Answer<Body>>
  patch<Body = any>(path: string, body?: unknown, options?: SendOptions): Promise<Answer<Body>>
  delete<Body = any>(path: string, options?: SendOptions): Promise<Answer<Body>>
}

export interface SessionClient extends ApiClient {
  readonly email: string
  readonly password: string
  readonly personId: string
  /** The session cookie as the browser would send it. */
  readonly cookie: string
  readonly csrfToken: string
}

let loaded: ContractDocument | undefined
export const contractDocument = () => (loaded ??= loadContract())

export function keyClient(origin: string, secret?: string): ApiClient {
  return client(origin, secret === undefined ? {} : { authorization: `Bearer ${secret}` })
}

/** Signs in as the console does; the client then carries cookie and CSRF token. */
export async function sessionClient(origin: string, person: { id: string; email: string; password: string }): Promise<SessionClient> {
  const answer = await client(origin, {}).post('/v1/session', { email: person.email, password: person.password })
  expect(answer.status, JSON.stringify(answer.body)).toBe(201)
  const cookie = cookieOf(answer)!
  const csrfToken = answer.body.csrf_token as string
  return { ...client(origin, { cookie, 'x-csrf-token': csrfToken }), cookie, csrfToken, email: person.email, password: person.password, personId: person.id }
}

/** `name=value` of the session cookie that an answer sets. */
export function cookieOf(answer: Answer): string | undefined {
  return answer.headers.getSetCookie().map((line) => line.split(';', 1)[0]!).find((pair) => pair.startsWith('heftwise_session='))
}

export function client(origin: string, standing: Record<string, string>): ApiClient {
  const send: ApiClient['send'] = async (method, path, { headers = {}, body } = {}) => {
    const isRaw = body === undefined || typeof body === 'string' || body instanceof Uint8Array || body instanceof FormData
    const response = await fetch(origin + path, {
      method,
      headers: { ...standing, ...(isRaw ? {} : { 'content-type': 'application/json' }), ...headers },
      body: (isRaw ? body : JSON.stringify(body)) as BodyInit | undefined,
      redirect: 'manual',
    })
    const type = (response.headers.get('content-type') ?? '').split(';', 1)[0]!
    const bytes = Buffer.from(await response.arrayBuffer())
    const parsed: unknown = bytes.length === 0 ? undefined : /json$/.test(type) ? JSON.parse(bytes.toString('utf8')) : /^text|yaml/.test(type) ? bytes.toString('utf8') : bytes
    requireContract(method, path, response, type, parsed)
    return { status: response.status, headers: response.headers, body: parsed as any }
  }
  return {
    send,
    get: (path, options) => send('GET', path, options),
    post: (path, body, options) => send('POST', path, { ...options, body }),
    put: (path, body, options) => send('PUT', path, { ...options, body }),
    patch: (path, body, options) => send('PATCH', path, { ...options, body }),
    delete: (path, options) => send('DELETE', path, options),
  }
}

/** Every answer that a test gets must be one that the contract lists, of its schema. */
function requireContract(method: string, path: string, response: Response, type: string, body: unknown): void {
  const { pathname } = new URL(path, 'http://unused.invalid')
  const document = contractDocument()
  const operation = document.operationsAt(pathname).find((candidate) => candidate.method === (method.toLowerCase() as Method))
  if (!operation || type === 'application/cbor') return
  const check = document.answerCheck(operation.id, response.status, type)
  if (!check) throw new Error(`${method} ${pathname} answered ${response.status} ${type || 'without a body'}, which the contract does not list for ${operation.id}: ${JSON.stringify(body)?.slice(0, 300)}`)
  const faults = check(body).map(faultOf)
  if (faults.length > 0) throw new Error(`${method} ${pathname} answered ${response.status} against its schema: ${JSON.stringify(faults.slice(0, 5))}\n${JSON.stringify(body)?.slice(0, 500)}`)
  if (response.status === 401) expect(response.headers.get('www-authenticate'), 'a 401 has a challenge').toBeTruthy()
  if (response.status === 429 || response.status === 503) expect(response.headers.get('retry-after'), `a ${response.status} says when to try again`).toBeTruthy()
}

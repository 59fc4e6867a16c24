import type { ErrorRequestHandler, Request, Response } from 'express'
import type { Logger } from 'pino'
import { BaseError, ConnectionError } from 'sequelize'
import { Refusal } from '../../shared/contract/problems.ts'
import { databaseErrno } from '../database/connection.ts'

/** Turns whatever was thrown into the one RFC 9457 answer. What is not a refusal is our mistake, and reported. */
export function problemAnswer(log: Logger): ErrorRequestHandler {
  return (error: unknown, req, res, next) => {
    // Hot requests that never entered Express have no path of its making.
    const path = req.path ?? req.url
    const refusal = asRefusal(error)
    if (refusal === undefined) {
      log.error({ err: error, requestId: req.requestId, method: req.method, path }, 'a request failed')
    } else if (refusal.kind.status >= 500) {
      log.warn({ err: error, requestId: req.requestId, path }, refusal.message)
    }
    if (res.headersSent) {
      next(error)
      return
    }
    answerProblem(req, res, refusal ?? internal)
  }
}

const internal = new Refusal('internal', 'This is our mistake and has been logged. Try again; if it stays, report the request_id to the operator of this installation.')

export function answerProblem(req: Request, res: Response, refusal: Refusal): void {
  res.statusCode = refusal.kind.status
  for (const [name, value] of Object.entries(defaultHeaders(refusal))) res.setHeader(name, value)
  for (const [name, value] of Object.entries(refusal.headers)) res.setHeader(name, value)
  res.setHeader('Content-Type', 'application/problem+json')
  res.setHeader('Cache-Control', 'no-store')
  res.end(JSON.stringify(problemDocument(refusal, req.requestId)))
}

/** The RFC 9457 document of a refusal. */
export function problemDocument(refusal: Refusal, requestId?: string): Record<string, unknown> {
  const { type, title, status } = refusal.kind
  return {
    type,
    title,
    status,
    detail: refusal.message,
    ...(requestId === undefined ? {} : { request_id: requestId }),
    ...(refusal.errors.length > 0 ? { errors: refusal.errors } : {}),
    ...refusal.extra,
  }
}

function defaultHeaders({ kind }: Refusal): Record<string, string> {
  if (kind.status === 429) return { 'Retry-After': '5' }
  if (kind.status === 503) return { 'Retry-After': '1' }
  return {}
}

/** undefined: nobody's request is to blame. */
export function asRefusal(error: unknown): Refusal | undefined {
  if (error instanceof Refusal) return error
  if (error instanceof URIError) return new Refusal('not-found', 'The path holds a % that is not followed by two hex digits of UTF-8. Encode it as %25.')
  if (isDatabaseLost(error)) {
    return new Refusal('not-ready', 'The database does not answer just now. Nothing was changed by this request unless it had been committed; try again shortly.', { cause: error })
  }
  if (isDiskFull(error)) return new Refusal('not-ready', 'The disk is full: nothing can be stored until some space is freed. The operator of this installation must act.', { cause: error })
  return fileServerRefusal(error)
}

/** What express's file server throws about the request: no such file, a path out of bounds, a range that is not there. */
function fileServerRefusal(error: unknown): Refusal | undefined {
  const { status, statusCode, message } = (error ?? {}) as { status?: number; statusCode?: number; message?: string }
  if (status === undefined || status !== statusCode || status < 400 || status >= 500) return undefined
  if (status === 403 || status === 404) return new Refusal('not-found', 'There is no such file.', { cause: error })
  return new Refusal('invalid-request', `The request cannot be answered: ${message}.`, { cause: error })
}

const lostCodes = new Set(['ECONNREFUSED', 'ECONNRESET', 'EPIPE', 'ETIMEDOUT', 'ENOENT', 'PROTOCOL_CONNECTION_LOST'])
/** 45009 … 45028: the connector's own errors about closed sockets and pools; 1053: shutdown; 1927: killed; 2006, 2013: gone. */
const lostErrnos = new Set([45_009, 45_012, 45_013, 45_026, 45_027, 45_028, 45_038, 1_053, 1_040, 1_927, 2_006, 2_013])

function isDatabaseLost(error: unknown): boolean {
  if (error instanceof ConnectionError) return true
  const isDatabaseError = error instanceof BaseError || (error instanceof Error && 'sqlState' in error)
  if (!isDatabaseError) return false
  const errno = databaseErrno(error)
  if (errno !== undefined && lostErrnos.has(errno)) return true
  for (let e = error as { code?: string; parent?: unknown; cause?: unknown } | undefined; e; e = (e.parent ?? e.cause) as typeof e) {
    if (e.code !== undefined && lostCodes.has(e.code)) return true
  }
  return false
}

function isDiskFull(error: unknown): boolean {
  const errno = databaseErrno(error)
  return (error as { code?: string } | null)?.code === 'ENOSPC' || errno === 1_021 || errno === 1_114 || errno === -28
}

export const methodNotAllowed = (method: string, path: string, allowed: readonly string[]) =>
  new Refusal('method-not-allowed', `${path} does not take ${method}. It takes ${allowed.join(', ')}.`, { headers: { Allow: allowed.join(', ') } })


import { request as httpRequest, Agent } from 'node:http'
import { request as httpsRequest } from 'node:https'
import type { IncomingMessage, OutgoingHttpHeaders } from 'node:http'
import type { Request, Response } from 'express'
import { HeldElsewhere } from '../services/adaptations/index.ts'
import type { AdaptationService } from '../services/adaptations/index.ts'

/** Names the process a request was forwarded to: it must not forward it again. */
const forwardedHeader = 'x-heftwise-forwarded'
/** What concerns one hop only (RFC 9110, section 7.6.1), or is claimed here already. */
const notForwarded = new Set([
  'connection', 'keep-alive', 'proxy-authenticate', 'proxy-authorization', 'te', 'trailer', 'transfer-encoding', 'upgrade', 'host', 'expect',
  'content-length', 'idempotency-key',
])
const answered = ['content-type', 'retry-after', 'etag', 'location', 'link', 'www-authenticate', 'cache-control']
const timeoutMs = 10_000

const agent = new Agent({ keepAlive: true, maxSockets: 64 })

/**
 * Serves a request about an adaptation here, or passes it on to the process that holds it. A holder whose port is closed has
 * ended: then this process takes over at once.
 *
 * @param body  as it came; undefined: none
 */
export async function serveOrForward(
  adaptations: AdaptationService, req: Request, res: Response, body: Buffer | undefined, serve: () => Promise<void>,
): Promise<void> {
  for (let attempt = 1; ; attempt++) {
    try {
      return await serve()
    } catch (error) {
      if (!(error instanceof HeldElsewhere) || attempt === 3 || req.headers[forwardedHeader] !== undefined) throw error
      const outcome = await forward(error, req, res, body)
      if (outcome === 'answered') return
      if (outcome === 'unreachable') throw error
      await adaptations.holderIsGone(error)
    }
  }
}

async function forward(
  { holder }: HeldElsewhere, req: Request, res: Response, body: Buffer | undefined,
): Promise<'answered' | 'gone' | 'unreachable'> {
  if (holder.address === null) return 'unreachable'
  let answer: IncomingMessage
  try {
    answer = await ask(holder.address, holder.id, req, body)
  } catch (error) {
    return (error as { code?: string }).code === 'ECONNREFUSED' ? 'gone' : 'unreachable'
  }
  res.statusCode = answer.statusCode ?? 502
  for (const name of answered) {
    const value = answer.headers[name]
    if (value !== undefined) res.setHeader(name, value)
  }
  await new Promise<void>((done, fail) => {
    answer.on('error', fail).pipe(res).on('finish', done).on('close', done)
  })
  return 'answered'
}

function ask(address: string, holderId: string, req: Request, body: Buffer | undefined): Promise<IncomingMessage> {
  const url = new URL(req.originalUrl ?? req.url, address)
  const headers: OutgoingHttpHeaders = { [forwardedHeader]: holderId, 'x-request-id': req.requestId }
  for (const [name, value] of Object.entries(req.headers)) {
    if (!notForwarded.has(name) && value !== undefined) headers[name] ??= value
  }
  if (body !== undefined) headers['content-length'] = body.length
  return new Promise((resolve, reject) => {
    const isSecure = url.protocol === 'https:'
    const asked = (isSecure ? httpsRequest : httpRequest)(url, { method: req.method, headers, timeout: timeoutMs, ...(!isSecure && { agent }) }, resolve)
    asked.on('timeout', () => asked.destroy(new Error('The holder did not answer in time.')))
    asked.on('error', reject)
    asked.end(body)
  })
}

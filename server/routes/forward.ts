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
  // Held against our own address here already, which is not the holder's.
  'origin', 'sec-fetch-site',
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
  let bytes: Buffer
  try {
    answer = await ask(holder.address, holder.id, req, body)
    // Whole, before anything is answered: what breaks off is no answer, and an Idempotency-Key keeps it in one piece.
    bytes = await wholeOf(answer)
  } catch (error) {
    return (error as { code?: string }).code === 'ECONNREFUSED' ? 'gone' : 'unreachable'
  }
  res.statusCode = answer.statusCode ?? 502
  for (const name of answered) {
    const value = answer.headers[name]
    if (value !== undefined) res.setHeader(name, value)
  }
  res.end(bytes)
  return 'answered'
}

async function wholeOf(answer: IncomingMessage): Promise<Buffer> {
  const parts: Buffer[] = []
  for await (const part of answer) parts.push(part as Buffer)
  return Buffer.concat(parts)
}

function ask(address: string, holderId: string, req: Request, body: Buffer | undefined): Promise<IncomingMessage> {
  // A request may name a host of its own choice in its first line (RFC 9112, section 3.2.2); only path and query are taken from it.
  const url = new URL(address)
  const { pathname, search } = new URL(req.originalUrl ?? req.url, url)
  Object.assign(url, { pathname, search })
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

import { randomFillSync } from 'node:crypto'
import type { RequestHandler } from 'express'

declare global {
  // eslint-disable-next-line @typescript-eslint/no-namespace
  namespace Express {
    interface Request {
      /** Ours, or the sender's where it sent a sound one; repeated in the answer, in problems, in logs and in the audit trail. */
      requestId: string
      /** W3C Trace Context, level 1: the trace this request belongs to. */
      traceId: string
    }
  }
}

const soundId = /^[A-Za-z0-9._~-]{1,64}$/
const soundTraceparent = /^[0-9a-f]{2}-([0-9a-f]{32})-([0-9a-f]{16})-[0-9a-f]{2}(?:-.*)?$/

/** Random bytes for many ids at once: asking the generator each time costs a request more than its routing does. */
const pool = Buffer.alloc(4096)
let poolAt = pool.length

function randomTraceId(): string {
  if (poolAt === pool.length) {
    randomFillSync(pool)
    poolAt = 0
  }
  poolAt += 16
  return pool.toString('hex', poolAt - 16, poolAt)
}

export function requestContext(): RequestHandler {
  return (req, res, next) => {
    const sentId = req.headers['x-request-id']
    const trace = soundTraceparent.exec(String(req.headers.traceparent ?? ''))
    req.traceId = trace && !/^0+$/.test(trace[1]!) && !/^0+$/.test(trace[2]!) ? trace[1]! : randomTraceId()
    req.requestId = typeof sentId === 'string' && soundId.test(sentId) ? sentId : req.traceId
    res.setHeader('X-Request-Id', req.requestId)
    next()
  }
}

import { createHash } from 'node:crypto'
import type { Request, RequestHandler, Response } from 'express'
import type { Logger } from 'pino'
import { Refusal } from '../../shared/contract/problems.ts'
import type { Clock } from '../clock.ts'
import { duplicateKey } from '../database/connection.ts'
import type { Database } from '../database/connection.ts'
import { uuid7 } from '../database/uuid7.ts'

interface Row {
  body_hash: string
  claim: string
  state: 'running' | 'answered' | 'not_kept'
  status: number
  headers: string
  body: string
  started_at: Date
}

const keptMs = 24 * 3_600_000
/** A first request that has not answered for so long died with its process; nothing of ours takes longer. */
const abandonedMs = 60_000
const keptHeaders = ['content-type', 'location', 'etag']
/** Answers that say nothing about the request itself; the next try may fare better. */
const passing = new Set([401, 403, 429])

/**
 * Makes a POST safe to repeat: the same Idempotency-Key, from the same caller on the same path, gets the first answer again.
 * Answers that carry a secret are not kept; a repeat is told so.
 */
export function idempotency({ database, clock, log }: { database: Database; clock: Clock; log: Logger }): (options: { keepsAnswer: boolean }) => RequestHandler {
  const { pool } = database
  let sweptAt = 0

  async function claim(scope: string, bodyHash: string): Promise<string | Row> {
    for (let attempt = 0; attempt < 3; attempt++) {
      const mine = uuid7()
      const now = clock.now()
      try {
        await pool.query("INSERT INTO idempotency_answers (scope_hash, body_hash, claim, state, started_at) VALUES (?, ?, ?, 'running', ?)", [scope, bodyHash, mine, now])
        return mine
      } catch (error) {
        if (duplicateKey(error) === undefined) throw error
      }
      const [row] = await pool.query<Row[]>('SELECT * FROM idempotency_answers WHERE scope_hash = ?', [scope])
      if (row === undefined) continue
      const ageMs = now.getTime() - row.started_at.getTime()
      const isOver = ageMs > keptMs || (row.state === 'running' && ageMs > abandonedMs && row.body_hash === bodyHash)
      if (!isOver) return row
      await pool.query('DELETE FROM idempotency_answers WHERE scope_hash = ? AND claim = ?', [scope, row.claim])
    }
    throw inFlight()
  }

  async function store(res: Response, scope: string, mine: string, body: string, keepsAnswer: boolean): Promise<void> {
    const status = res.statusCode
    if (status >= 500 || passing.has(status)) {
      await pool.query('DELETE FROM idempotency_answers WHERE scope_hash = ? AND claim = ?', [scope, mine])
      return
    }
    const headers = Object.fromEntries(keptHeaders.map((name) => [name, res.getHeader(name)]).filter(([, value]) => value !== undefined))
    const isKept = keepsAnswer || status >= 400
    await pool.query('UPDATE idempotency_answers SET state = ?, status = ?, headers = ?, body = ? WHERE scope_hash = ? AND claim = ?', [
      isKept ? 'answered' : 'not_kept', status, JSON.stringify(headers), isKept ? body : null, scope, mine,
    ])
  }

  async function sweep(): Promise<void> {
    const now = clock.now().getTime()
    if (now - sweptAt < 3_600_000) return
    sweptAt = now
    await pool.query('DELETE FROM idempotency_answers WHERE started_at < ?', [new Date(now - keptMs)])
  }

  return ({ keepsAnswer }) => async (req, res, next) => {
    const key = (req.input?.header as Record<string, string> | undefined)?.['idempotency-key']
    if (key === undefined) return next()
    const scope = scopeOf(req, key)
    const bodyHash = sha256(JSON.stringify([req.input?.query, req.input?.body, req.headers['if-match'] ?? null]))
    const claimed = await claim(scope, bodyHash)
    if (typeof claimed !== 'string') {
      repeat(res, claimed, bodyHash)
      return
    }
    const end = res.end.bind(res) as (...args: unknown[]) => Response
    res.end = ((...args: unknown[]) => {
      res.end = end as typeof res.end
      const [chunk] = args
      const body = typeof chunk === 'string' ? chunk : Buffer.isBuffer(chunk) ? chunk.toString('utf8') : ''
      store(res, scope, claimed, body, keepsAnswer)
        .catch((error: unknown) => log.error({ err: error, requestId: req.requestId }, 'the answer for an Idempotency-Key could not be kept'))
        .finally(() => end(...args))
      return res
    }) as typeof res.end
    void sweep().catch((error: unknown) => log.warn({ err: error }, 'old idempotency answers could not be deleted'))
    next()
  }
}

function repeat(res: Response, row: Row, bodyHash: string): void {
  if (row.body_hash !== bodyHash) throw new Refusal('idempotency-mismatch', 'This Idempotency-Key came before with other content. Use a new key for a new request.')
  if (row.state === 'running') throw inFlight()
  if (row.state === 'not_kept') {
    throw new Refusal('secret-not-repeated', 'The first request with this Idempotency-Key was carried out, and its answer held a secret, which is not kept. If it was lost, rotate the key to get a new secret.')
  }
  for (const [name, value] of Object.entries(JSON.parse(row.headers) as Record<string, string>)) res.setHeader(name, value)
  res.status(row.status).end(row.body)
}

function inFlight(): Refusal {
  return new Refusal('idempotency-in-flight', 'The first request with this Idempotency-Key is still running. Ask again shortly for its answer.', { headers: { 'Retry-After': '1' } })
}

function scopeOf(req: Request, key: string): string {
  const caller = req.caller!
  return sha256(JSON.stringify([caller.kind, caller.id, caller.teamId, req.operation?.id, req.path, key]))
}

function sha256(text: string): string {
  return createHash('sha256').update(text).digest('hex')
}

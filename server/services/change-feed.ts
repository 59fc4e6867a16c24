import { randomUUID } from 'node:crypto'
import type { PoolConnection } from 'mariadb'
import type { Logger } from 'pino'
import { QueryTypes } from 'sequelize'
import type { Transaction } from 'sequelize'
import { Refusal } from '../../shared/contract/problems.ts'
import type { Database } from '../database/connection.ts'

export type ChangeKind = 'release' | 'version' | 'archive' | 'key' | 'adaptation' | 'job' | 'arm' | 'loss'

export interface Change {
  readonly kind: ChangeKind
  readonly teamId: string
  /** What changed: an id, or the name that the kind's listeners look things up by. */
  readonly subject: string
}

export interface ChangeFeed {
  /** Tells every server process, this one as soon as the transaction commits. */
  announce(transaction: Transaction, change: Change): Promise<void>
  /** The same on a raw connection: call the returned function after the commit. */
  announceOn(connection: PoolConnection, change: Change): Promise<() => void>
  on(kind: ChangeKind, listener: (change: Change) => void | Promise<void>): () => void
  /** Called when changes may have been missed: forget what was cached. */
  onGap(listener: () => void | Promise<void>): void
  /** Has this process heard from the database within the last second? */
  isCurrent(): boolean
  /** As isCurrent, but looks at the database first when the last look is too old. @throws {Refusal} not-ready */
  ensureCurrent(): Promise<void>
  start(): Promise<void>
  stop(): Promise<void>
}

const pollMs = 250
const staleMs = 1_000
/** A transaction that took an id but has not committed after so long has been rolled back. */
const openIdMs = 60_000
const keepMinutes = 60

/**
 * A table that every process polls. Ids are given out before commits, so a lower id may appear after a higher one: ids that
 * were skipped are asked for again until they turn up or their transaction can no longer be open.
 */
export function createChangeFeed({ database, log }: { database: Database; log: Logger }): ChangeFeed {
  const origin = randomUUID()
  const listeners = new Map<ChangeKind, Set<(change: Change) => void | Promise<void>>>()
  const gapListeners = new Set<() => void | Promise<void>>()
  const missing = new Map<number, number>()
  /** Our own changes that were delivered with their commit and have not come by in the table yet. */
  const delivered = new Set<number>()
  let last = 0
  let heardAt = Number.NEGATIVE_INFINITY
  let timer: NodeJS.Timeout | undefined
  let polling: Promise<void> | undefined
  let stopped = true
  let sweptAt = 0

  const report = (error: unknown) => log.error({ err: error }, 'a change listener failed')
  const call = async (listener: () => void | Promise<void>) => {
    try {
      await listener()
    } catch (error) {
      report(error)
    }
  }
  const deliver = async (change: Change) => {
    for (const listener of listeners.get(change.kind) ?? []) await call(() => listener(change))
  }
  const deliverOwn = (id: number, change: Change) => {
    if (id > last || missing.has(id)) delivered.add(id)
    return deliver(change)
  }

  const insert = 'INSERT INTO changes (origin, kind, team_id, subject, at) VALUES (?, ?, ?, ?, UTC_TIMESTAMP(3))'
  const values = (change: Change) => [origin, change.kind, change.teamId, change.subject]

  async function look(): Promise<void> {
    const askedAt = performance.now()
    const wasLost = heardAt !== Number.NEGATIVE_INFINITY && askedAt - heardAt > openIdMs
    const open = [...missing.keys()]
    const rows = await database.pool.query<{ id: number; origin: string; kind: ChangeKind; team_id: string; subject: string }[]>(
      `SELECT id, origin, kind, team_id, subject FROM changes WHERE id > ? ${open.length > 0 ? 'OR id IN (?)' : ''} ORDER BY id`,
      open.length > 0 ? [last, open] : [last],
    )
    for (const row of rows) {
      for (let id = last + 1; id < row.id && row.id - id < 1_000; id++) missing.set(id, askedAt)
      missing.delete(row.id)
      last = Math.max(last, row.id)
      // One of ours that is not among them was committed although the answer to its COMMIT was lost.
      if (row.origin !== origin || !delivered.delete(row.id)) await deliver({ kind: row.kind, teamId: row.team_id, subject: row.subject })
    }
    for (const [id, since] of missing) if (askedAt - since > openIdMs) missing.delete(id)
    // One that fails leaves this look unfinished: the next one finds the same gap.
    if (wasLost) for (const listener of gapListeners) await listener()
    heardAt = askedAt
    if (askedAt - sweptAt > 600_000) {
      sweptAt = askedAt
      await database.pool.query(`DELETE FROM changes WHERE at < UTC_TIMESTAMP(3) - INTERVAL ${keepMinutes} MINUTE`)
    }
  }

  const poll = () => {
    polling ??= look()
      .catch((error: unknown) => log.warn({ err: error }, 'the change feed could not be read'))
      .finally(() => {
        polling = undefined
      })
    return polling
  }
  const schedule = () => {
    if (stopped) return
    timer = setTimeout(() => void poll().then(schedule), pollMs)
    timer.unref()
  }
  const isCurrent = () => performance.now() - heardAt <= staleMs

  return {
    async announce(transaction, change) {
      const [id] = await database.sequelize.query(insert, { replacements: values(change), transaction, type: QueryTypes.INSERT })
      transaction.afterCommit(() => deliverOwn(Number(id), change))
    },
    async announceOn(connection, change) {
      const { insertId } = (await connection.query(insert, values(change))) as { insertId: number }
      return () => void deliverOwn(insertId, change)
    },
    on(kind, listener) {
      const set = listeners.get(kind) ?? new Set()
      listeners.set(kind, set.add(listener))
      return () => set.delete(listener)
    },
    onGap(listener) {
      gapListeners.add(listener)
    },
    isCurrent,
    async ensureCurrent() {
      if (isCurrent()) return
      let limit: NodeJS.Timeout | undefined
      await Promise.race([poll(), new Promise((done) => (limit = setTimeout(done, 500)))])
      clearTimeout(limit)
      if (!isCurrent()) {
        throw new Refusal('not-ready', 'The database has not answered for more than a second, so releases and revocations may have been missed. Try again shortly.', {
          headers: { 'Retry-After': '1' },
        })
      }
    },
    async start() {
      const [row] = await database.pool.query<{ last: number | null }[]>('SELECT MAX(id) AS last FROM changes')
      // A little back, for transactions that have an id but no commit yet; hearing of a change twice does no harm.
      last = Math.max(0, Number(row?.last ?? 0) - 200)
      heardAt = performance.now()
      stopped = false
      schedule()
    },
    async stop() {
      stopped = true
      clearTimeout(timer)
      await polling
    },
  }
}

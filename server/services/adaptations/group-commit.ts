import type { Pool, PoolConnection } from 'mariadb'
import type { LogRow } from './log-row.ts'
import { logColumns, logValues } from './log-row.ts'

/** One entry on its way into the log. Exactly one of its two callbacks is called, once. */
export interface CommitItem {
  readonly row: LogRow
  /** The lease's epoch under which the entry was prepared. */
  readonly epoch: number
  committed(): void
  failed(error: CommitError): void
}

/**
 * Why an entry did not become durable. `lease-lost`, `refused`, `unreachable`: certainly not stored. `unknown`: the connection
 * broke during COMMIT, and only the log can tell.
 */
export class CommitError extends Error {
  readonly outcome: 'lease-lost' | 'refused' | 'unreachable' | 'unknown'

  constructor(outcome: CommitError['outcome'], message: string, cause?: unknown) {
    super(message, { cause })
    this.outcome = outcome
  }
}

export interface GroupCommitOptions {
  readonly pool: Pool
  /** Entries and bytes that share one transaction at most. */
  readonly largestGroup?: number
  readonly mostBytes?: number
  /** Transactions at the same time. More than one only pays when groups are kept small. */
  readonly lanes?: number
  /** A database that takes longer for one transaction counts as lost. */
  readonly timeoutMs?: number
}

export interface GroupCommit {
  add(item: CommitItem): void
  /** Fails what is still waiting for an adaptation whose earlier entry failed. */
  drop(adaptationId: string, error: CommitError): void
  /** Resolves when nothing is waiting or on its way. */
  settled(): Promise<void>
}

const insert = `INSERT INTO adaptation_log (${logColumns.join(', ')}) VALUES (${logColumns.map(() => '?').join(', ')})`

/**
 * Makes log entries durable, those that wait at the same moment in one transaction: with the round trips shared, the cost of
 * durability per batch falls with load. Entries of one adaptation keep their order. Each transaction first checks, under a
 * lock, that this process still holds the adaptations it writes to.
 */
export function createGroupCommit(options: GroupCommitOptions): GroupCommit {
  const { pool, largestGroup = 256, mostBytes = 8 << 20, lanes = 1, timeoutMs = 10_000 } = options
  let waiting: CommitItem[] = []
  const busy = new Set<string>()
  let running = 0
  let scheduled = false
  let onSettled: (() => void)[] = []

  function schedule(): void {
    if (scheduled || running >= lanes || waiting.length === 0) return
    scheduled = true
    // Everything that this turn of the event loop brings goes into the same transaction. Waiting any longer was tried: then
    // nothing is prepared while a transaction runs, and on a busy machine that costs more than the transactions it saves.
    setImmediate(() => {
      scheduled = false
      while (running < lanes && waiting.length > 0) {
        const group = take()
        if (group.length === 0) break
        running++
        void commit(group).finally(() => {
          running--
          for (const { row } of group) busy.delete(row.adaptationId)
          schedule()
          if (running === 0 && waiting.length === 0) for (const done of onSettled.splice(0)) done()
        })
      }
    })
  }

  function take(): CommitItem[] {
    const group: CommitItem[] = []
    const rest: CommitItem[] = []
    const passed = new Set<string>()
    let bytes = 0
    for (const item of waiting) {
      const { adaptationId, content } = item.row
      const size = 2048 + (content?.length ?? 0)
      const full = group.length >= largestGroup || (group.length > 0 && bytes + size > mostBytes)
      if (full || busy.has(adaptationId) || passed.has(adaptationId)) {
        rest.push(item)
        passed.add(adaptationId)
      } else {
        group.push(item)
        bytes += size
      }
    }
    waiting = rest
    for (const { row } of group) busy.add(row.adaptationId)
    return group
  }

  async function commit(group: readonly CommitItem[]): Promise<void> {
    let left = group
    while (left.length > 0) {
      const result = await attempt(left)
      if (result === 'committed') return left.forEach((item) => item.committed())
      if (Array.isArray(result)) {
        for (const item of left) if (result.includes(item)) item.failed(new CommitError('lease-lost', 'Another process has taken the adaptation over.'))
        left = left.filter((item) => !result.includes(item))
      } else if (result.outcome === 'refused' && left.length > 1) {
        return commitSingly(left)
      } else {
        const error = result
        return left.forEach((item) => item.failed(error))
      }
    }
  }

  /** One entry that the database refuses must not take others with it, except those that build on it. */
  async function commitSingly(group: readonly CommitItem[]): Promise<void> {
    const broken = new Map<string, CommitError>()
    for (const item of group) {
      const before = broken.get(item.row.adaptationId)
      if (before !== undefined) {
        item.failed(before)
        continue
      }
      await commit([{ ...item, committed: () => item.committed(), failed: (error) => {
        broken.set(item.row.adaptationId, error)
        item.failed(error)
      } }])
    }
  }

  /** The items whose lease is lost, when there are any: then nothing was stored. */
  async function attempt(group: readonly CommitItem[]): Promise<'committed' | CommitItem[] | CommitError> {
    let connection: PoolConnection
    try {
      connection = await connectionWithin(pool, 2_000)
    } catch (error) {
      return new CommitError('unreachable', 'The database cannot be reached.', error)
    }
    const timer = setTimeout(() => connection.destroy(), timeoutMs)
    let committing = false
    try {
      const ids = [...new Map(group.map((item) => [item.row.adaptationId, item.epoch])).keys()]
      // Sent back to back; the answers are awaited together.
      const [, leases] = await Promise.all([
        connection.query('START TRANSACTION'),
        connection.query<{ id: string; lease_epoch: number }[]>('SELECT id, lease_epoch FROM adaptations WHERE id IN (?) LOCK IN SHARE MODE', [ids]),
        connection.batch(insert, group.map(({ row }) => logValues(row))),
      ])
      const epochs = new Map(leases.map((lease) => [lease.id, Number(lease.lease_epoch)]))
      const lost = group.filter((item) => epochs.get(item.row.adaptationId) !== item.epoch)
      if (lost.length > 0) {
        await connection.query('ROLLBACK')
        return lost
      }
      committing = true
      await connection.query('COMMIT')
      return 'committed'
    } catch (error) {
      if (committing) {
        // Even where the server answers COMMIT with an error, the connection is not used again: only the log knows.
        connection.destroy()
        return new CommitError('unknown', 'The connection broke while a transaction was being committed.', error)
      }
      const isAlive = await connection.query('ROLLBACK').then(() => true, () => false)
      if (!isAlive) connection.destroy()
      return new CommitError(isAlive ? 'refused' : 'unreachable', 'The entry could not be stored.', error)
    } finally {
      clearTimeout(timer)
      await Promise.resolve(connection.release()).catch(() => undefined)
    }
  }

  return {
    add(item) {
      waiting.push(item)
      schedule()
    },
    drop(adaptationId, error) {
      const dropped = waiting.filter((item) => item.row.adaptationId === adaptationId)
      waiting = waiting.filter((item) => item.row.adaptationId !== adaptationId)
      for (const item of dropped) item.failed(error)
    },
    settled() {
      if (running === 0 && waiting.length === 0) return Promise.resolve()
      return new Promise((done) => onSettled.push(done))
    },
  }
}

/** The pool itself waits far longer than a controller would. */
async function connectionWithin(pool: Pool, ms: number): Promise<PoolConnection> {
  let timer: NodeJS.Timeout | undefined
  const asked = pool.getConnection()
  try {
    return await Promise.race([asked, new Promise<never>((_, reject) => {
      timer = setTimeout(() => reject(new Error(`No connection within ${ms} ms.`)), ms)
    })])
  } catch (error) {
    void asked.then((connection) => connection.release(), () => undefined)
    throw error
  } finally {
    clearTimeout(timer)
  }
}

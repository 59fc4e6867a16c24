import { hostname } from 'node:os'
import type { Logger } from 'pino'
import type { Database } from '../../database/connection.ts'
import { uuid7 } from '../../database/uuid7.ts'
import type { ChangeFeed } from '../change-feed.ts'

const beatMs = 1_000
const lifeSeconds = 5

/** Who holds an adaptation instead of us. */
export interface Holder {
  readonly id: string
  /** Where it takes forwarded requests; null: nowhere that we can reach. */
  readonly address: string | null
}

/**
 * Which server process holds which adaptation. Each process keeps one row alive; an adaptation names its holder and counts
 * an epoch that every transfer raises and every commit checks. So a holder that was slow, paused or cut off may believe what
 * it likes: it cannot write.
 */
export interface Leases {
  readonly processId: string
  /** Whether our own row is alive as far as we can know without asking. */
  isAlive(): boolean
  /**
   * Makes this process the holder unless another live one is.
   *
   * @returns the new epoch, or who holds it
   */
  take(adaptationId: string): Promise<{ readonly epoch: number } | { readonly holder: Holder }>
  /** Takes it from a holder that is known to be gone. */
  takeFrom(adaptationId: string, holderId: string): Promise<void>
  /** Is it still ours, in this epoch? */
  isOurs(adaptationId: string, epoch: number): Promise<boolean>
  give(adaptationId: string, epoch: number): Promise<void>
  start(): Promise<void>
  /** This process listens on that port: others may forward requests to it. */
  announce(port: number): Promise<void>
  stop(): Promise<void>
}

export function createLeases({ database, changeFeed, log, peerAddress }: {
  database: Database
  changeFeed: ChangeFeed
  log: Logger
  /** Where other processes reach this one; null: its port on loopback, once known. */
  peerAddress: string | null
}): Leases {
  const processId = uuid7()
  const host = hostname()
  let address: string | null = peerAddress
  let heardAt = Number.NEGATIVE_INFINITY
  let timer: NodeJS.Timeout | undefined
  let beating: Promise<void> | undefined
  let started: Promise<void> | undefined
  let stopped = false

  async function beat(): Promise<void> {
    const askedAt = performance.now()
    await database.pool.query(
      `INSERT INTO server_processes (id, host, address, expires_at) VALUES (?, ?, ?, UTC_TIMESTAMP(3) + INTERVAL ${lifeSeconds} SECOND)
       ON DUPLICATE KEY UPDATE address = VALUES(address), expires_at = VALUES(expires_at)`,
      [processId, host, address],
    )
    heardAt = askedAt
  }

  function schedule(): void {
    if (stopped) return
    timer = setTimeout(() => {
      beating = beat()
        .catch((error: unknown) => log.warn({ err: error }, 'the process could not renew its lease'))
        .finally(schedule)
    }, beatMs)
    timer.unref()
  }

  function begin(): Promise<void> {
    started ??= beat().then(
      () => {
        schedule()
        // Rows of processes that ended long ago are of no use to anyone.
        void database.pool.query('DELETE FROM server_processes WHERE expires_at < UTC_TIMESTAMP(3) - INTERVAL 1 DAY').catch(() => undefined)
      },
      (error: unknown) => {
        started = undefined
        throw error
      },
    )
    return started
  }

  return {
    processId,
    isAlive: () => performance.now() - heardAt < lifeSeconds * 1000,
    async take(adaptationId) {
      await begin()
      const connection = await database.pool.getConnection()
      try {
        await connection.query('START TRANSACTION')
        const [row] = await connection.query<LeaseRow[]>(
          `SELECT a.team_id AS team, a.lease_holder AS id, a.lease_epoch AS epoch, p.host, p.address, p.expires_at > UTC_TIMESTAMP(3) AS alive
           FROM adaptations a LEFT JOIN server_processes p ON p.id = a.lease_holder WHERE a.id = ? FOR UPDATE`,
          [adaptationId],
        )
        if (row.id !== null && row.id !== processId && Number(row.alive) === 1 && !isPredecessor(row)) {
          await connection.query('ROLLBACK')
          return { holder: { id: row.id, address: reachable(row) } }
        }
        const epoch = Number(row.epoch) + 1
        await connection.query('UPDATE adaptations SET lease_holder = ?, lease_epoch = ? WHERE id = ?', [processId, epoch, adaptationId])
        // A former holder may not know that it has lost it: it looks when it hears of a change.
        const tell = row.id === null || row.id === processId ? null
          : await changeFeed.announceOn(connection, { kind: 'adaptation', teamId: row.team, subject: adaptationId })
        await connection.query('COMMIT')
        tell?.()
        return { epoch }
      } catch (error) {
        connection.destroy()
        throw error
      } finally {
        await Promise.resolve(connection.release()).catch(() => undefined)
      }
    },
    async takeFrom(adaptationId, holderId) {
      await database.pool.query('UPDATE adaptations SET lease_holder = NULL, lease_epoch = lease_epoch + 1 WHERE id = ? AND lease_holder = ?', [adaptationId, holderId])
    },
    async isOurs(adaptationId, epoch) {
      const [row] = await database.pool.query<{ lease_holder: string | null; lease_epoch: number }[]>(
        'SELECT lease_holder, lease_epoch FROM adaptations WHERE id = ?', [adaptationId],
      )
      return row?.lease_holder === processId && Number(row.lease_epoch) === epoch
    },
    async give(adaptationId, epoch) {
      await database.pool.query('UPDATE adaptations SET lease_holder = NULL WHERE id = ? AND lease_holder = ? AND lease_epoch = ?', [adaptationId, processId, epoch])
    },
    start: begin,
    async announce(port) {
      address ??= `http://127.0.0.1:${port}`
      await begin()
      await beat()
    },
    async stop() {
      stopped = true
      clearTimeout(timer)
      await beating
      if (started === undefined) return
      await database.pool.query('UPDATE adaptations SET lease_holder = NULL WHERE lease_holder = ?', [processId]).catch(() => undefined)
      await database.pool.query('DELETE FROM server_processes WHERE id = ?', [processId]).catch(() => undefined)
    },
  }

  /** Someone who listened on this host where we listen now has ended. */
  function isPredecessor(row: LeaseRow): boolean {
    return address !== null && row.host === host && row.address === address
  }

  function reachable({ host: theirs, address: at }: LeaseRow): string | null {
    const isLoopback = at !== null && /^https?:\/\/(127\.|localhost|\[::1\])/.test(at)
    return isLoopback && theirs !== host ? null : at
  }
}

interface LeaseRow {
  team: string
  id: string | null
  epoch: number
  host: string | null
  address: string | null
  alive: number | null
}

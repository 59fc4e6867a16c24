import { createHash, timingSafeEqual } from 'node:crypto'
import type { Logger } from 'pino'
import { Op } from 'sequelize'
import type { Clock } from '../clock.ts'
import type { Database } from '../database/connection.ts'
import type { ApiKey } from '../models/api-key.ts'
import type { ChangeFeed } from './change-feed.ts'
import type { Caller, Scope } from './permissions.ts'

export interface KeyEntry {
  readonly caller: Caller & { kind: 'key' }
  readonly hash: Buffer
  /** Milliseconds since 1970; a former secret's entry ends with its overlap. */
  readonly validUntil: number
}

export interface KeyDirectory {
  /** The active key whose secret has this SHA-256, without a database round trip. Counts as a use of the key. */
  find(hash: Buffer): KeyEntry | undefined
  /** When the key was used last, as far as this process knows and has not yet written. */
  lastUsed(id: string): Date | undefined
  /** Reads one key again; called when a change is announced. */
  refresh(id: string): Promise<void>
  /** Writes last uses; otherwise done every few seconds. */
  flush(): Promise<void>
  start(): Promise<void>
  stop(): Promise<void>
}

const flushMs = 10_000

export function hashSecret(secret: string): Buffer {
  return createHash('sha256').update(secret).digest()
}

export function createKeyDirectory({ database, clock, changeFeed, log }: { database: Database; clock: Clock; changeFeed: ChangeFeed; log: Logger }): KeyDirectory {
  // Looked up by half of the hash, compared whole in constant time.
  let byPrefix = new Map<string, KeyEntry>()
  let prefixesOf = new Map<string, string[]>()
  const used = new Map<string, Date>()
  let timer: NodeJS.Timeout | undefined
  let reading: Promise<void> = Promise.resolve()

  const prefixOf = (hash: Buffer) => hash.toString('latin1', 0, 16)
  const put = (entry: KeyEntry) => {
    const prefix = prefixOf(entry.hash)
    byPrefix.set(prefix, entry)
    prefixesOf.set(entry.caller.id, [...(prefixesOf.get(entry.caller.id) ?? []), prefix])
  }
  const drop = (id: string) => {
    for (const prefix of prefixesOf.get(id) ?? []) byPrefix.delete(prefix)
    prefixesOf.delete(id)
  }
  /** One after the other: what was read before a revocation must not be put in place after it. */
  const inTurn = (read: () => Promise<void>): Promise<void> => {
    const done = reading.then(read)
    reading = done.catch(() => undefined)
    return done
  }
  const load = async () => {
    const rows = await database.models.ApiKey.findAll({ where: { revokedAt: null, expiresAt: { [Op.gt]: clock.now() } } })
    byPrefix = new Map()
    prefixesOf = new Map()
    for (const row of rows) entriesOf(row).forEach(put)
  }

  async function readAgain(id: string): Promise<void> {
    try {
      const row = await database.models.ApiKey.findByPk(id)
      drop(id)
      if (row !== null && row.revokedAt === null) entriesOf(row).forEach(put)
    } catch (error) {
      // It may have been revoked, so it is not honoured until it can be read.
      drop(id)
      log.warn({ err: error, key: id }, 'a changed key could not be read; it is tried again')
      setTimeout(() => void directory.refresh(id), 1_000).unref()
    }
  }

  async function flush(): Promise<void> {
    const uses = [...used]
    used.clear()
    if (uses.length === 0) return
    try {
      await database.pool.batch(
        'UPDATE api_keys SET last_used_at = GREATEST(COALESCE(last_used_at, ?), ?) WHERE id = ?',
        uses.map(([id, at]) => [at, at, id]),
      )
    } catch (error) {
      for (const [id, at] of uses) if (!used.has(id)) used.set(id, at)
      log.warn({ err: error }, 'last uses of keys could not be written; they are tried again')
    }
  }

  const directory: KeyDirectory = {
    find(hash) {
      const entry = byPrefix.get(prefixOf(hash))
      if (entry === undefined || !timingSafeEqual(entry.hash, hash)) return undefined
      const now = clock.now()
      if (now.getTime() >= entry.validUntil) return undefined
      used.set(entry.caller.id, now)
      return entry
    },
    lastUsed: (id) => used.get(id),
    refresh: (id) => inTurn(() => readAgain(id)),
    flush,
    async start() {
      changeFeed.on('key', ({ subject }) => directory.refresh(subject))
      changeFeed.onGap(() => inTurn(load))
      await inTurn(load)
      timer = setInterval(() => void flush(), flushMs)
      timer.unref()
    },
    async stop() {
      clearInterval(timer)
      await flush()
    },
  }
  return directory
}

function entriesOf(row: ApiKey): KeyEntry[] {
  const { id, teamId, name } = row
  const scopes = Object.freeze(row.scopes.split(' ') as Scope[])
  const entry = (hash: string, secret: 'newest' | 'former', validUntil: Date): KeyEntry => ({
    caller: Object.freeze({ kind: 'key', id, teamId, name, scopes, secret }),
    hash: Buffer.from(hash, 'hex'),
    validUntil: validUntil.getTime(),
  })
  const entries = [entry(row.secretHash, 'newest', row.expiresAt)]
  if (row.formerHash !== null && row.overlapUntil !== null) {
    entries.push(entry(row.formerHash, 'former', row.overlapUntil < row.expiresAt ? row.overlapUntil : row.expiresAt))
  }
  return entries
}

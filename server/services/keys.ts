import { randomBytes } from 'node:crypto'
import { Op } from 'sequelize'
import type { Transaction, WhereOptions } from 'sequelize'
import type { components } from '../../shared/contract/openapi.generated.ts'
import { Refusal } from '../../shared/contract/problems.ts'
import type { Dependencies } from '../dependencies.ts'
import { uuid7 } from '../database/uuid7.ts'
import type { ApiKey } from '../models/api-key.ts'
import { hashSecret } from './key-directory.ts'
import { decodeCursor, pageOf } from './page.ts'
import type { Page } from './page.ts'
import { callerLabel, requireAction } from './permissions.ts'
import type { Caller, Scope } from './permissions.ts'

type KeyView = components['schemas']['Key']
type KeyState = KeyView['state']
type WithSecret = components['schemas']['KeyWithSecret']

export interface KeyService {
  list(caller: Caller, page: { cursor?: string; limit: number; state?: KeyState }): Promise<Page<KeyView>>
  get(caller: Caller, id: string): Promise<KeyView>
  create(caller: Caller, key: { name: string; scopes: readonly Scope[]; expiresAt?: Date }, requestId: string): Promise<WithSecret>
  /** For start-up, before there is anybody to ask for it. */
  createFor(teamId: string, key: { name: string; scopes: readonly Scope[] }): Promise<WithSecret>
  revoke(caller: Caller, id: string, reason: string, requestId: string): Promise<KeyView>
  rotate(caller: Caller, id: string, overlapSeconds: number, requestId: string): Promise<WithSecret>
  /** The key rotates itself, with its newest secret only: otherwise a leaked former one could lock the owner out. */
  rotateCurrent(caller: Caller, overlapSeconds: number, requestId: string): Promise<WithSecret>
}

const dayMs = 24 * 3_600_000

export function createKeyService({ database, clock, audit, changeFeed, keys }: Dependencies): KeyService {
  const { ApiKey } = database.models

  const view = (row: ApiKey): KeyView => {
    const now = clock.now()
    const lastUsed = keys.lastUsed(row.id) ?? row.lastUsedAt
    return {
      id: row.id,
      name: row.name,
      scopes: row.scopes.split(' ') as Scope[],
      state: row.revokedAt ? 'revoked' : row.expiresAt <= now ? 'expired' : 'active',
      hint: row.hint,
      created_at: row.createdAt.toISOString(),
      created_by: row.createdBy,
      expires_at: row.expiresAt.toISOString(),
      last_used_at: lastUsed?.toISOString() ?? null,
      overlap_until: row.overlapUntil && row.overlapUntil > now && !row.revokedAt ? row.overlapUntil.toISOString() : null,
      revoked_at: row.revokedAt?.toISOString() ?? null,
    }
  }

  async function find(teamId: string, id: string, transaction?: Transaction): Promise<ApiKey> {
    const row = await ApiKey.findOne({ where: { id, teamId }, transaction, lock: transaction ? true : undefined })
    if (row === null) throw new Refusal('not-found', `There is no key ${id} in this team. GET /v1/keys lists its keys.`)
    return row
  }

  function requireActive(row: ApiKey): void {
    const { state, expires_at: expiresAt } = view(row)
    if (state === 'revoked') throw new Refusal('key-inactive', `Key "${row.name}" was revoked. Create another.`)
    if (state === 'expired') throw new Refusal('key-inactive', `Key "${row.name}" expired at ${expiresAt}. Create another.`)
  }

  async function make(by: Caller | 'system', teamId: string, key: { name: string; scopes: readonly Scope[]; expiresAt?: Date }, requestId?: string): Promise<WithSecret> {
    const now = clock.now()
    const expiresAt = key.expiresAt ?? new Date(now.getTime() + 365 * dayMs)
    requireExpiry(expiresAt, now)
    const secret = newSecret()
    const row = await database.transaction(async (transaction) => {
      const created = await ApiKey.create(
        {
          id: uuid7(),
          teamId,
          name: key.name,
          scopes: key.scopes.join(' '),
          ...secret.stored,
          createdAt: now,
          createdBy: by === 'system' ? 'Heftwise' : callerLabel(by),
          expiresAt,
        },
        { transaction },
      )
      await audit.record(transaction, {
        by, teamId, action: 'create_key', subject: { kind: 'key', id: created.id, name: key.name }, after: { scopes: key.scopes, expires_at: expiresAt.toISOString() }, requestId,
      })
      await announce(transaction, created)
      return created
    })
    await keys.refresh(row.id)
    return { key: view(row), secret: secret.text }
  }

  function announce(transaction: Transaction, row: ApiKey): Promise<void> {
    return changeFeed.announce(transaction, { kind: 'key', teamId: row.teamId, subject: row.id })
  }

  async function rotate(caller: Caller, id: string, overlapSeconds: number, requestId: string): Promise<WithSecret> {
    const secret = newSecret()
    const row = await database.transaction(async (transaction) => {
      const found = await find(caller.teamId, id, transaction)
      requireActive(found)
      const overlapUntil = overlapSeconds > 0 ? new Date(clock.now().getTime() + overlapSeconds * 1_000) : null
      const before = { hint: found.hint }
      await found.update({ ...secret.stored, formerHash: overlapUntil ? found.secretHash : null, overlapUntil }, { transaction })
      await audit.record(transaction, {
        by: caller, action: 'rotate_key', subject: { kind: 'key', id, name: found.name }, before,
        after: { hint: found.hint, overlap_until: overlapUntil?.toISOString() ?? null }, requestId,
      })
      await announce(transaction, found)
      return found
    })
    await keys.refresh(id)
    return { key: view(row), secret: secret.text }
  }

  return {
    async list(caller, { cursor, limit, state }) {
      requireAction(caller, 'manage_keys')
      const before = cursor === undefined ? {} : { id: { [Op.lt]: decodeCursor(cursor, 'text') } }
      const rows = await ApiKey.findAll({
        where: { [Op.and]: [{ teamId: caller.teamId }, before, stateFilter(state, clock.now())] },
        order: [['id', 'DESC']],
        limit: limit + 1,
      })
      return pageOf(rows, limit, (row) => [row.id], view)
    },

    async get(caller, id) {
      requireAction(caller, 'manage_keys')
      return view(await find(caller.teamId, id))
    },

    async create(caller, key, requestId) {
      requireAction(caller, 'manage_keys')
      return make(caller, caller.teamId, key, requestId)
    },

    createFor: (teamId, key) => make('system', teamId, key),

    async revoke(caller, id, reason, requestId) {
      requireAction(caller, 'manage_keys')
      const row = await database.transaction(async (transaction) => {
        const found = await find(caller.teamId, id, transaction)
        if (found.revokedAt !== null) throw new Refusal('key-inactive', `Key "${found.name}" was revoked at ${found.revokedAt.toISOString()} already.`)
        await found.update({ revokedAt: clock.now(), formerHash: null, overlapUntil: null }, { transaction })
        await audit.record(transaction, { by: caller, action: 'revoke_key', subject: { kind: 'key', id, name: found.name }, reason, requestId })
        await announce(transaction, found)
        return found
      })
      await keys.refresh(id)
      return view(row)
    },

    async rotate(caller, id, overlapSeconds, requestId) {
      requireAction(caller, 'manage_keys')
      return rotate(caller, id, overlapSeconds, requestId)
    },

    async rotateCurrent(caller, overlapSeconds, requestId) {
      requireAction(caller, 'self')
      if (caller.kind !== 'key') throw new Refusal('role-not-allowed', 'Only a key can rotate itself. People rotate keys at POST /v1/keys/{key}/rotate.')
      if (caller.secret !== 'newest') {
        throw new Refusal('key-inactive', `Key "${caller.name}" has been rotated; this is its former secret, which still works but cannot rotate the key. Use the newest one.`)
      }
      return rotate(caller, caller.id, overlapSeconds, requestId)
    },
  }
}

function newSecret() {
  const text = randomBytes(32).toString('base64url')
  return { text, stored: { secretHash: hashSecret(text).toString('hex'), hint: text.slice(-4) } }
}

function requireExpiry(expiresAt: Date, now: Date): void {
  const detail =
    Number.isNaN(expiresAt.getTime())
      ? 'This is no time that a clock shows; leap seconds are not taken. Name a time such as 2027-06-01T00:00:00Z.'
      : expiresAt <= now
      ? `${expiresAt.toISOString()} has passed. Name a time in the future.`
      : expiresAt.getTime() > now.getTime() + 2 * 366 * dayMs
        ? `${expiresAt.toISOString()} is more than two years ahead. Name an earlier time; keys can be rotated.`
        : undefined
  if (detail !== undefined) throw new Refusal('invalid-request', `expires_at: ${detail}`, { errors: [{ pointer: '/expires_at', detail }] })
}

function stateFilter(state: KeyState | undefined, now: Date): WhereOptions {
  switch (state) {
    case undefined:
      return {}
    case 'revoked':
      return { revokedAt: { [Op.ne]: null } }
    case 'expired':
      return { revokedAt: null, expiresAt: { [Op.lte]: now } }
    case 'active':
      return { revokedAt: null, expiresAt: { [Op.gt]: now } }
  }
}

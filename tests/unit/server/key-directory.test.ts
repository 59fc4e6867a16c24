import pino from 'pino'
import { expect, test } from 'vitest'
import type { Database } from '../../../server/database/connection.ts'
import type { ChangeFeed } from '../../../server/services/change-feed.ts'
import { createKeyDirectory, hashSecret } from '../../../server/services/key-directory.ts'

test('a key that is revoked while all keys are being read is not put back', async () => {
  const active = {
    id: 'k', teamId: 't', name: 'cell', scopes: 'predict', secretHash: hashSecret('of the key').toString('hex'),
    expiresAt: new Date(Date.now() + 60_000), revokedAt: null as Date | null, formerHash: null, overlapUntil: null,
  }
  let answerAll = (): void => undefined
  const all = new Promise<(typeof active)[]>((resolve) => (answerAll = () => resolve([active])))
  const ApiKey = { findAll: () => all, findByPk: async () => ({ ...active, revokedAt: new Date() }) }
  const changeFeed = { on: () => () => undefined, onGap: () => undefined } as unknown as ChangeFeed
  const database = { models: { ApiKey }, pool: {} } as unknown as Database
  const keys = createKeyDirectory({ database, clock: { now: () => new Date() }, changeFeed, log: pino({ level: 'silent' }) })

  const started = keys.start()
  const refreshed = keys.refresh('k')
  await new Promise(setImmediate)
  answerAll()
  await Promise.all([started, refreshed])

  expect(keys.find(hashSecret('of the key'))).toBeUndefined()
  await keys.stop()
})

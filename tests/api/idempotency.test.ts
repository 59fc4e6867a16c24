import { randomUUID } from 'node:crypto'
import { afterAll, beforeAll, expect, test } from 'vitest'
import type { SessionClient } from '../support/api.ts'
import { testClock } from '../support/clock.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer, TestTeam } from '../support/server.ts'

/** draft-ietf-httpapi-idempotency-key-header-07, section 2.7: 409 in flight, 422 with another payload. */
const clock = testClock()
let server: TestServer
let team: TestTeam
let administrator: SessionClient
beforeAll(async () => {
  server = await startTestServer({ clock, settings: { session: { idleMs: 1e12, absoluteMs: 1e12 } } })
  team = await server.createTeam()
  administrator = await team.signIn('administrator')
})
afterAll(() => server.stop())

const repeated = (key: string = randomUUID()) => ({ headers: { 'idempotency-key': key } })
const withoutRequestId = ({ request_id: _id, ...rest }: Record<string, unknown>) => rest

test('the same request again gets the first answer and does nothing more', async () => {
  const key = await team.createKey(['read'])
  const options = repeated()

  const first = await administrator.post(`/v1/keys/${key.id}/revoke`, { reason: 'Not needed.' }, options)
  const second = await administrator.post(`/v1/keys/${key.id}/revoke`, { reason: 'Not needed.' }, options)

  expect(first.status).toBe(200)
  expect(second.status).toBe(200)
  expect(second.body).toEqual(first.body)
  expect(await server.database.models.AuditEvent.count({ where: { subjectId: key.id, action: 'revoke_key' } })).toBe(1)
})

test('a refusal is repeated as well', async () => {
  const options = repeated()
  const path = `/v1/keys/${randomUUID()}/revoke`

  const first = await administrator.post(path, { reason: 'Not there.' }, options)
  const second = await administrator.post(path, { reason: 'Not there.' }, options)

  expect([first.status, second.status]).toEqual([404, 404])
  expect(second.body).toEqual(first.body)
})

test('another body under the same key is refused', async () => {
  const key = await team.createKey(['read'])
  const options = repeated()
  await administrator.post(`/v1/keys/${key.id}/revoke`, { reason: 'First.' }, options)

  const other = await administrator.post(`/v1/keys/${key.id}/revoke`, { reason: 'Second.' }, options)

  expect(other.status).toBe(422)
  expect(other.body.type).toBe('tag:heftwise.invalid,2026:idempotency-mismatch')
})

test('the key counts per caller and per path', async () => {
  const [one, two] = [await team.createKey(['read']), await team.createKey(['read'])]
  const colleague = await team.signIn('administrator')
  const options = repeated()

  const answers = [
    await administrator.post(`/v1/keys/${one.id}/revoke`, { reason: 'Gone.' }, options),
    await administrator.post(`/v1/keys/${two.id}/revoke`, { reason: 'Gone.' }, options),
    await colleague.post(`/v1/keys/${one.id}/revoke`, { reason: 'Gone.' }, options),
  ]

  expect(answers.map(({ status }) => status)).toEqual([200, 200, 409])
})

test('of many at the same time one is carried out and the others wait their turn', async () => {
  const options = repeated()

  const answers = await Promise.all(Array.from({ length: 8 }, () => administrator.post('/v1/keys', { name: 'at once', scopes: ['read'] }, options)))

  const statuses = answers.map(({ status }) => status)
  expect(statuses.filter((status) => status === 201)).toHaveLength(1)
  expect(statuses.filter((status) => status === 409)).toHaveLength(7)
  expect(await server.database.models.ApiKey.count({ where: { name: 'at once' } })).toBe(1)
})

test('an answer with a secret is not kept: the repeat is told what to do, and no second key is made', async () => {
  const options = repeated()

  const first = await administrator.post('/v1/keys', { name: 'only one', scopes: ['read'] }, options)
  const second = await administrator.post('/v1/keys', { name: 'only one', scopes: ['read'] }, options)

  expect(first.status).toBe(201)
  expect(second.status).toBe(409)
  expect(second.body.type).toBe('tag:heftwise.invalid,2026:secret-not-repeated')
  expect(await server.database.models.ApiKey.count({ where: { name: 'only one' } })).toBe(1)
  const rows = await server.database.pool.query('SELECT * FROM idempotency_answers')
  expect(JSON.stringify(rows)).not.toContain(first.body.secret)
})

test('a key is forgotten after 24 hours', async () => {
  const key = await team.createKey(['read'])
  const options = repeated()
  await administrator.post(`/v1/keys/${key.id}/revoke`, { reason: 'Gone.' }, options)

  clock.advance(24 * 3_600_000 + 1)
  const again = await administrator.post(`/v1/keys/${key.id}/revoke`, { reason: 'Gone.' }, options)

  expect(again.status, 'carried out anew: it is revoked already').toBe(409)
})

test('a request that died with its process may be tried again after a minute', async () => {
  const options = repeated()
  const first = await administrator.post('/v1/keys', { name: 'died', scopes: ['read'] }, options)
  await server.database.sequelize.query("UPDATE idempotency_answers SET state = 'running', started_at = :at ORDER BY claim DESC LIMIT 1", { replacements: { at: clock.now() } })

  const early = await administrator.post('/v1/keys', { name: 'died', scopes: ['read'] }, options)
  clock.advance(61_000)
  const late = await administrator.post('/v1/keys', { name: 'died', scopes: ['read'] }, options)

  expect(first.status).toBe(201)
  expect(early.body.type).toBe('tag:heftwise.invalid,2026:idempotency-in-flight')
  expect(late.status).toBe(201)
})

test.each([['', 422], ['k'.repeat(256), 422]])('a key of unsound length is refused', async (key, status) => {
  const answer = await administrator.post('/v1/keys', { name: 'unsound', scopes: ['read'] }, repeated(key))

  expect(answer.status).toBe(status)
  expect(answer.body.errors[0].pointer).toBe('idempotency-key')
  expect(withoutRequestId(answer.body)).toMatchObject({ status })
})

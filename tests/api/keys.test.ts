import { createHash } from 'node:crypto'
import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import { testClock } from '../support/clock.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer, TestTeam } from '../support/server.ts'
import type { Answer, SessionClient } from '../support/api.ts'

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

const cursorOf = (position: unknown) => Buffer.from(JSON.stringify(position)).toString('base64url')
const dayMs = 24 * 3_600_000
const works = async (secret: string, at: TestServer = server) => (await at.api(secret).get('/v1/session')).status === 200

async function until(condition: () => boolean | Promise<boolean>, withinMs: number): Promise<void> {
  const deadline = Date.now() + withinMs
  while (!(await condition())) {
    if (Date.now() > deadline) throw new Error(`not so within ${withinMs} ms`)
    await new Promise((done) => setTimeout(done, 20))
  }
}

describe('making a key', () => {
  test('shows a secret of 256 bits once and stores only its SHA-256', async () => {
    const made = await administrator.post('/v1/keys', { name: 'cell controller', scopes: ['predict', 'adapt'] })

    expect(made.status).toBe(201)
    expect(made.headers.get('location')).toBe(`/v1/keys/${made.body.key.id}`)
    const { secret, key } = made.body
    expect(Buffer.from(secret, 'base64url')).toHaveLength(32)
    expect(key).toMatchObject({ name: 'cell controller', scopes: ['predict', 'adapt'], state: 'active', hint: secret.slice(-4), last_used_at: null })
    const row = await server.database.models.ApiKey.findByPk(key.id)
    expect(row!.secretHash).toBe(createHash('sha256').update(secret).digest('hex'))
    const everywhere = [(await administrator.get(`/v1/keys/${key.id}`)).body, (await administrator.get('/v1/keys')).body, row, await server.database.models.AuditEvent.findAll()]
    expect(JSON.stringify(everywhere)).not.toContain(secret)
    expect(await works(secret)).toBe(true)
  })

  test('lasts a year unless told, and at most two', async () => {
    const usual = await administrator.post('/v1/keys', { name: 'usual', scopes: ['read'] })
    const endless = await administrator.post('/v1/keys', { name: 'endless', scopes: ['read'], expires_at: new Date(clock.now().getTime() + 740 * dayMs).toISOString() })
    const past = await administrator.post('/v1/keys', { name: 'past', scopes: ['read'], expires_at: new Date(clock.now().getTime() - 1).toISOString() })

    expect(Date.parse(usual.body.key.expires_at)).toBe(clock.now().getTime() + 365 * dayMs)
    expect([endless.status, past.status]).toEqual([422, 422])
    expect(endless.body.errors[0].pointer).toBe('/expires_at')
  })

  test.each([
    ['no scope', { name: 'a', scopes: [] }, '/scopes'],
    ['a scope twice', { name: 'a', scopes: ['read', 'read'] }, '/scopes'],
    ['an unknown scope', { name: 'a', scopes: ['everything'] }, '/scopes/0'],
    ['no name', { scopes: ['read'] }, '/name'],
    ['an unknown field', { name: 'a', scopes: ['read'], quota: 3 }, '/quota'],
    ['a date without a zone', { name: 'a', scopes: ['read'], expires_at: '2027-01-01' }, '/expires_at'],
    ['a leap second', { name: 'a', scopes: ['read'], expires_at: '2026-12-31T23:59:60Z' }, '/expires_at'],
  ])('with %s is refused, pointing at the field', async (_case, body, pointer) => {
    const answer = await administrator.post('/v1/keys', body)

    expect(answer.status).toBe(422)
    expect(answer.body.errors.map((fault: { pointer: string }) => fault.pointer)).toContain(pointer)
  })

  test('is for administrators only', async () => {
    for (const role of ['engineer', 'operator', 'reviewer'] as const) {
      const person = await team.signIn(role)
      expect((await person.post('/v1/keys', { name: 'mine', scopes: ['read'] })).status).toBe(403)
    }
  })
})

describe('a key', () => {
  test('ends when it expires', async () => {
    const { body } = await administrator.post('/v1/keys', { name: 'short', scopes: ['read'], expires_at: new Date(clock.now().getTime() + 1_000).toISOString() })

    expect(await works(body.secret)).toBe(true)
    clock.advance(1_000)
    expect(await works(body.secret)).toBe(false)
    expect((await administrator.get(`/v1/keys/${body.key.id}`)).body.state).toBe('expired')
  })

  test('ends at once when it is revoked, and within a second in other processes', async () => {
    const other = await server.another()
    const key = await team.createKey(['read'])
    await until(() => works(key.secret, other), 1_000)

    const revoked = await administrator.post(`/v1/keys/${key.id}/revoke`, { reason: 'Found in a log.' })

    expect(await works(key.secret)).toBe(false)
    expect(revoked.body).toMatchObject({ state: 'revoked', revoked_at: clock.now().toISOString() })
    await until(async () => !(await works(key.secret, other)), 1_000)
    await other.stop()
  })

  test('that is revoked already says so', async () => {
    const key = await team.createKey(['read'])
    await administrator.post(`/v1/keys/${key.id}/revoke`, { reason: 'Not needed.' })

    const again = await administrator.post(`/v1/keys/${key.id}/revoke`, { reason: 'Not needed.' })
    const rotated = await administrator.post(`/v1/keys/${key.id}/rotate`, {})

    expect([again.status, rotated.status]).toEqual([409, 409])
    expect(rotated.body.type).toBe('tag:heftwise.invalid,2026:key-inactive')
  })

  test('remembers when it was used last, also across a restart', async () => {
    const key = await team.createKey(['read'])
    await key.get('/v1/session')

    const seen = await administrator.get(`/v1/keys/${key.id}`)
    await server.dependencies.keys.flush()
    const row = await server.database.models.ApiKey.findByPk(key.id)

    expect(seen.body.last_used_at).toBe(clock.now().toISOString())
    expect(row!.lastUsedAt!.toISOString()).toBe(clock.now().toISOString())
  })

  test('of another team is not there', async () => {
    const foreign = await (await server.createTeam()).createKey(['read'])

    const answers = [
      await administrator.get(`/v1/keys/${foreign.id}`),
      await administrator.post(`/v1/keys/${foreign.id}/revoke`, { reason: 'Not mine.' }),
      await administrator.post(`/v1/keys/${foreign.id}/rotate`, {}),
    ]

    expect(answers.map(({ status }) => status)).toEqual([404, 404, 404])
    expect(await works(foreign.secret)).toBe(true)
  })

  test('leaves a trace of each act in the audit, with the reason', async () => {
    const { body } = await administrator.post('/v1/keys', { name: 'traced', scopes: ['read'] }, { headers: { 'x-request-id': 'the-very-request' } })
    await administrator.post(`/v1/keys/${body.key.id}/rotate`, { overlap_seconds: 0 })
    await administrator.post(`/v1/keys/${body.key.id}/revoke`, { reason: 'Cell is scrapped.' })

    const events = await server.database.models.AuditEvent.findAll({ where: { subjectId: body.key.id }, order: [['id', 'ASC']] })

    expect(events.map(({ action, reason, actorId }) => [action, reason, actorId])).toEqual([
      ['create_key', null, administrator.personId],
      ['rotate_key', null, administrator.personId],
      ['revoke_key', 'Cell is scrapped.', administrator.personId],
    ])
    expect(events[0]!.requestId).toBe('the-very-request')
  })
})

describe('rotating a key', () => {
  test('gives a new secret at once and lets the old one work until the overlap is over', async () => {
    const key = await team.createKey(['read'])

    const rotated = await administrator.post(`/v1/keys/${key.id}/rotate`, { overlap_seconds: 3600 })

    expect(rotated.body.key).toMatchObject({ id: key.id, overlap_until: new Date(clock.now().getTime() + 3_600_000).toISOString() })
    expect(await works(rotated.body.secret)).toBe(true)
    expect(await works(key.secret)).toBe(true)
    clock.advance(3_599_999)
    expect(await works(key.secret)).toBe(true)
    clock.advance(1)
    expect(await works(key.secret)).toBe(false)
    expect(await works(rotated.body.secret)).toBe(true)
  })

  test('without an overlap ends the old secret at once', async () => {
    const key = await team.createKey(['read'])

    const rotated = await administrator.post(`/v1/keys/${key.id}/rotate`, { overlap_seconds: 0 })

    expect(await works(key.secret)).toBe(false)
    expect(await works(rotated.body.secret)).toBe(true)
  })

  test('twice ends the first secret, whatever its overlap was', async () => {
    const key = await team.createKey(['read'])

    const second = await administrator.post(`/v1/keys/${key.id}/rotate`, { overlap_seconds: 3600 })
    const third = await administrator.post(`/v1/keys/${key.id}/rotate`, { overlap_seconds: 3600 })

    expect(await works(key.secret)).toBe(false)
    expect(await works(second.body.secret)).toBe(true)
    expect(await works(third.body.secret)).toBe(true)
  })

  test('and revoking it ends both secrets', async () => {
    const key = await team.createKey(['read'])
    const rotated = await administrator.post(`/v1/keys/${key.id}/rotate`, { overlap_seconds: 3600 })

    await administrator.post(`/v1/keys/${key.id}/revoke`, { reason: 'Both leaked.' })

    expect(await works(key.secret)).toBe(false)
    expect(await works(rotated.body.secret)).toBe(false)
  })

  test('a key rotates itself, but not with its former secret', async () => {
    const key = await team.createKey(['predict'])

    const rotated = await key.post('/v1/keys/current/rotate', { overlap_seconds: 60 })
    const withFormer = await key.post('/v1/keys/current/rotate', {})
    const withNewest = await server.api(rotated.body.secret).post('/v1/keys/current/rotate', {})

    expect(rotated.body.key.id).toBe(key.id)
    expect(withFormer.status).toBe(409)
    expect(withNewest.status).toBe(200)
  })

  test('is not something a person’s session can do to "current"', async () => {
    const answer = await administrator.post('/v1/keys/current/rotate', {})

    expect(answer.status).toBe(403)
  })
})

describe('the list of keys', () => {
  test('pages through all of a team, newest first, with links', async () => {
    const own = await server.createTeam()
    const person = await own.signIn('administrator')
    const made: string[] = []
    for (let i = 0; i < 5; i++) made.unshift((await own.createKey(['read'])).id)

    const seen: string[] = []
    let path: string | undefined = '/v1/keys?limit=2'
    while (path !== undefined) {
      const page: Answer = await person.get(path)
      seen.push(...page.body.items.map(({ id }: { id: string }) => id))
      path = /^<([^>]+)>; rel="next"$/.exec(page.headers.get('link') ?? '')?.[1]
      expect(path === undefined).toBe(page.body.next_cursor === null)
    }

    expect(seen).toEqual(made)
  })

  test('filters by state', async () => {
    const own = await server.createTeam()
    const person = await own.signIn('administrator')
    const [active, revoked] = [await own.createKey(['read']), await own.createKey(['read'])]
    await person.post(`/v1/keys/${revoked.id}/revoke`, { reason: 'Gone.' })

    const ids = async (state: string) => (await person.get(`/v1/keys?state=${state}`)).body.items.map(({ id }: { id: string }) => id)

    expect(await ids('active')).toEqual([active.id])
    expect(await ids('revoked')).toEqual([revoked.id])
    expect(await ids('expired')).toEqual([])
  })

  test.each(['limit=0', 'limit=201', 'limit=two', 'limit=1&limit=2', 'state=gone', 'colour=red', 'cursor=zzz', `cursor=${cursorOf([1])}`, `cursor=${cursorOf(['a', 'b'])}`])('with %s is refused', async (query) => {
    const answer = await administrator.get(`/v1/keys?${query}`)

    expect(answer.status).toBe(422)
    expect(answer.body.errors[0].pointer).toBe(query.split('=')[0])
  })
})

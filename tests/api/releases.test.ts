import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import type { ApiClient } from '../support/api.ts'
import { twoJointArm } from '../support/recording-csv.ts'
import { startTestServer, type TestServer } from '../support/server.ts'
import { smallVersion, versionSnapshot } from '../support/versions.ts'

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

const base = '/v1/models/tinker-base'

async function teamWithVersions(count = 3) {
  const team = await server.createTeam()
  const key = await team.createKey(['build', 'read', 'release', 'predict'])
  await key.post('/v1/arms', twoJointArm())
  await key.post('/v1/models', { name: 'tinker-base', arm: 'tinker-2' })
  for (let seed = 1; seed <= count; seed++)
    await key.post(`${base}/versions`, versionSnapshot(smallVersion(seed), ['swivel', 'lift']))
  return { team, key }
}

const etagOf = async (client: ApiClient) => (await client.get(base)).headers.get('etag')!

async function release(client: ApiClient, version: number, reason = `Version ${version} is better.`) {
  return client.post(`${base}/releases`, { version, reason }, { headers: { 'if-match': await etagOf(client) } })
}

async function rollBack(client: ApiClient, to?: number) {
  return client.post(`${base}/rollback`, { reason: 'Worse than before.', to }, { headers: { 'if-match': await etagOf(client) } })
}

test('a release makes a version live and answers the new ETag', async () => {
  const { key } = await teamWithVersions()

  const released = await release(key, 2)

  expect(released.status).toBe(201)
  expect(released.body).toMatchObject({
    number: 1,
    kind: 'release',
    version: 2,
    previous_version: null,
    reason: 'Version 2 is better.',
  })
  expect(released.headers.get('etag')).toBe(await etagOf(key))
  expect((await key.get(base)).body).toMatchObject({ live_version: 2, live_since: released.body.at })
  expect((await key.get(`${base}/versions/2`)).body.first_released_at).toBe(released.body.at)
  expect((await key.get(`${base}/versions/1`)).body.first_released_at).toBeNull()
})

test('the next predict uses what was just released, and after a rollback what was live before', async () => {
  const { key } = await teamWithVersions()
  const predict = async () => {
    const row = [[0.3, -0.2]]
    return (
      await key.post(`${base}/predict`, { joint_names: ['swivel', 'lift'], position: row, velocity: row, acceleration: row })
    ).body
  }

  await release(key, 1)
  const one = await predict()
  await release(key, 2)
  const two = await predict()
  await rollBack(key)
  const back = await predict()

  expect([one.version, two.version, back.version]).toEqual([1, 2, 1])
  expect(two.torque).not.toEqual(one.torque)
  expect(back.torque).toEqual(one.torque)
})

test('without If-Match a release is refused with 428, with an outdated one with 412', async () => {
  const { key } = await teamWithVersions()
  const outdated = await etagOf(key)
  await release(key, 1)
  const send = (headers: Record<string, string>) => key.post(`${base}/releases`, { version: 2, reason: 'A try.' }, { headers })

  expect((await send({})).status).toBe(428)
  expect((await send({ 'if-match': '*' })).status).toBe(428)
  expect((await send({ 'if-match': outdated })).status).toBe(412)
  expect((await send({ 'if-match': `W/${await etagOf(key)}` })).status, 'weak tags never match (RFC 9110, 13.1.1)').toBe(412)
  expect((await send({ 'if-match': `"someone-elses", ${await etagOf(key)}` })).status, 'any of a list').toBe(201)
})

test('when two administrators release at once, exactly one wins', async () => {
  const { team, key } = await teamWithVersions()
  const [one, other] = [await team.signIn('administrator'), await team.signIn('administrator')]
  const etag = await etagOf(key)
  const send = (client: ApiClient, version: number) =>
    client.post(`${base}/releases`, { version, reason: 'Mine.' }, { headers: { 'if-match': etag } })

  const answers = await Promise.all([send(one, 1), send(other, 2), send(one, 3), send(other, 1)])

  expect(answers.map(({ status }) => status).sort()).toEqual([201, 412, 412, 412])
  const history = (await key.get(`${base}/releases`)).body.items
  expect(history).toHaveLength(1)
  expect((await key.get(base)).body.live_version).toBe(history[0].version)
})

test('two server processes on one database agree on who won', async () => {
  const { team, key } = await teamWithVersions()
  const { secret } = await team.createKey(['read', 'release'])
  const second = await server.another()
  try {
    const elsewhere = second.api(secret)
    const etag = await etagOf(key)
    const send = (client: ApiClient, version: number) =>
      client.post(`${base}/releases`, { version, reason: 'Mine.' }, { headers: { 'if-match': etag } })

    const answers = await Promise.all([send(key, 1), send(elsewhere, 2)])

    expect(answers.map(({ status }) => status).sort()).toEqual([201, 412])
  } finally {
    await second.stop()
  }
})

test('a fitting or import in between does not turn a release down', async () => {
  const { key } = await teamWithVersions()
  const etag = await etagOf(key)
  await key.post(`${base}/versions`, versionSnapshot(smallVersion(9), ['swivel', 'lift']))

  const released = await key.post(`${base}/releases`, { version: 1, reason: 'As decided.' }, { headers: { 'if-match': etag } })

  expect(released.status).toBe(201)
})

describe('a rollback', () => {
  test('goes to what was live before, and never back to what it left', async () => {
    const { key } = await teamWithVersions()
    for (const version of [1, 2, 3]) await release(key, version)

    const [first, second, third] = [await rollBack(key), await rollBack(key), await rollBack(key)]

    expect(first.body).toMatchObject({ number: 4, kind: 'rollback', version: 2, previous_version: 3 })
    expect(second.body).toMatchObject({ version: 1, previous_version: 2 })
    expect(third.body.type).toBe('tag:heftwise.invalid,2026:nothing-to-roll-back-to')
  })

  test('can name any version that was live, and no other', async () => {
    const { key } = await teamWithVersions()
    for (const version of [1, 2]) await release(key, version)

    expect((await rollBack(key, 3)).body.type).toBe('tag:heftwise.invalid,2026:nothing-to-roll-back-to')
    expect((await rollBack(key, 2)).body.type).toBe('tag:heftwise.invalid,2026:already-live')
    expect((await rollBack(key, 9)).status).toBe(404)
    expect((await rollBack(key, 1)).body).toMatchObject({ version: 1, kind: 'rollback' })
  })

  test('of a model that was never live is refused', async () => {
    const { key } = await teamWithVersions(1)

    expect((await rollBack(key)).body.type).toBe('tag:heftwise.invalid,2026:nothing-to-roll-back-to')
  })

  test('may be done by an operator, who may not release', async () => {
    const { team, key } = await teamWithVersions()
    for (const version of [1, 2]) await release(key, version)
    const operator = await team.signIn('operator')

    expect((await release(operator, 3)).status).toBe(403)
    expect((await rollBack(operator)).status).toBe(201)
  })
})

test('what cannot be released says why', async () => {
  const { key } = await teamWithVersions(1)
  await release(key, 1)

  expect((await release(key, 1)).body.type).toBe('tag:heftwise.invalid,2026:already-live')
  expect((await release(key, 7)).body).toMatchObject({
    type: 'tag:heftwise.invalid,2026:not-found',
    detail: expect.stringMatching(/no version 7; its newest is 1/),
  })
  expect((await key.post(`${base}/releases`, { version: 1 }, { headers: { 'if-match': await etagOf(key) } })).status).toBe(422)
})

test('history is kept, newest first, page after page, with who and why', async () => {
  const { team, key } = await teamWithVersions()
  const engineer = await team.signIn('engineer')
  await release(key, 1)
  await release(engineer, 2, 'Fitted on the new gripper.')
  await rollBack(key)

  const first = await engineer.get(`${base}/releases?limit=2`)
  const second = await engineer.get(`${base}/releases?limit=2&cursor=${first.body.next_cursor}`)

  expect(first.body.items.map((item: { number: number }) => item.number)).toEqual([3, 2])
  expect(first.body.items[1]).toMatchObject({ reason: 'Fitted on the new gripper.', by: 'A engineer' })
  expect(second.body.items.map((item: { number: number }) => item.number)).toEqual([1])
  expect(first.headers.get('etag')).toBe(await etagOf(key))
  const events = await server.database.models.AuditEvent.findAll({
    where: { teamId: team.id, action: ['model.release', 'model.roll_back'] },
  })
  expect(events.map(({ reason }) => reason)).toContain('Fitted on the new gripper.')
})

test('a release repeated with its Idempotency-Key is one release', async () => {
  const { key } = await teamWithVersions()
  const headers = { 'if-match': await etagOf(key), 'idempotency-key': 'once' }

  const first = await key.post(`${base}/releases`, { version: 1, reason: 'Once.' }, { headers })
  const again = await key.post(`${base}/releases`, { version: 1, reason: 'Once.' }, { headers })

  expect(again.status).toBe(201)
  expect(again.body).toEqual(first.body)
  expect((await key.get(`${base}/releases`)).body.items).toHaveLength(1)
})

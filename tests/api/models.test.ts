import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import { versionToWire } from '../../shared/contract/snapshots.ts'
import { twoJointArm } from '../support/recording-csv.ts'
import { startTestServer, type TestServer } from '../support/server.ts'
import { smallVersion, versionSnapshot } from '../support/versions.ts'

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

const joints = ['swivel', 'lift']

async function teamWithModel() {
  const team = await server.createTeam()
  const key = await team.createKey(['build', 'read', 'release', 'predict'])
  await key.post('/v1/arms', twoJointArm())
  await key.post('/v1/models', { name: 'tinker-base', arm: 'tinker-2', description: 'simulated' })
  return { team, key }
}

test('a model begins without versions, and names its arm', async () => {
  const { key } = await teamWithModel()

  const model = await key.get('/v1/models/tinker-base')

  expect(model.body).toMatchObject({
    name: 'tinker-base',
    arm: 'tinker-2',
    live_version: null,
    live_since: null,
    newest_version: null,
    archived_at: null,
  })
  expect(model.headers.get('etag')).toMatch(/^"[^"]+"$/)
  expect((await key.get('/v1/models?arm=tinker-2')).body.items).toHaveLength(1)
  expect((await key.get('/v1/models?arm=other')).body.items).toHaveLength(0)
})

test('a model of an arm that the team does not have is refused', async () => {
  const { key } = await teamWithModel()

  const refused = await key.post('/v1/models', { name: 'astray', arm: 'no-such-arm' })

  expect(refused.status).toBe(404)
  expect(refused.body.detail).toMatch(/no-such-arm/)
})

test('an imported version is exported with the same content and checksum', async () => {
  const { key } = await teamWithModel()
  const snapshot = versionSnapshot(smallVersion(), joints)

  const imported = await key.post('/v1/models/tinker-base/versions', snapshot)

  expect(imported.status).toBe(201)
  expect(imported.headers.get('location')).toBe('/v1/models/tinker-base/versions/1')
  expect(imported.body).toMatchObject({
    model: 'tinker-base',
    version: 1,
    origin: { kind: 'imported' },
    checksum: snapshot.checksum,
    first_released_at: null,
  })
  const exported = await key.get('/v1/models/tinker-base/versions/1/snapshot')
  expect(exported.body).toMatchObject({
    description: snapshot.description,
    parameters: snapshot.parameters,
    checksum: snapshot.checksum,
  })
  const again = await key.post('/v1/models/tinker-base/versions', exported.body)
  expect(again.body).toMatchObject({ version: 2, checksum: snapshot.checksum })
  expect((await key.get('/v1/models/tinker-base')).body.newest_version).toBe(2)
})

test('a snapshot that has not changed is answered with 304', async () => {
  const { key } = await teamWithModel()
  await key.post('/v1/models/tinker-base/versions', versionSnapshot(smallVersion(), joints))
  const etag = (await key.get('/v1/models/tinker-base/versions/1/snapshot')).headers.get('etag')!

  const repeated = await key.get('/v1/models/tinker-base/versions/1/snapshot', { headers: { 'if-none-match': etag } })

  expect(repeated.status).toBe(304)
})

describe('an import is refused', () => {
  const good = versionSnapshot(smallVersion(), joints)
  const other = versionSnapshot(smallVersion(2), joints)
  const description = good.description as Record<string, object>
  test.each([
    ['with the joints in another order', { joint_names: ['lift', 'swivel'] }, 'wrong-joints', /lift, swivel/],
    ["with another arm's joints", { joint_names: ['a', 'b'] }, 'wrong-joints', /a, b/],
    ['with a joint too few', { joint_names: ['swivel'] }, 'wrong-joints', /swivel/],
    ['in other units', { unit: ['N', 'N·m'] }, 'wrong-joints', /swivel/],
    ['with another checksum', { checksum: other.checksum }, 'artefact-unreadable', /changed on the way/],
    ["with another version's parameters", { parameters: other.parameters }, 'artefact-unreadable', /changed on the way/],
    ['with parameters that are not base64', { parameters: '***' }, 'artefact-unreadable', /base64/],
    ['with parameters cut short', { parameters: good.parameters.slice(0, 40) }, 'artefact-unreadable', /parameters has/],
    ['with a part missing', { description: { ...description, noise: undefined } }, 'artefact-unreadable', /noise is missing/],
    [
      'with null for a number',
      { description: { ...description, noise: [null, 1] } },
      'artefact-unreadable',
      /noise: value 0 is null/,
    ],
    [
      'with sizes that do not fit',
      { description: { ...description, network: { sizes: [6, 9, 2], activation: 'relu' } } },
      'artefact-unreadable',
      /parameters/,
    ],
    [
      'with sizes too large to be meant',
      { description: { ...description, network: { sizes: [6, 1e9, 2], activation: 'relu' } } },
      'artefact-unreadable',
      /parameters/,
    ],
    [
      'with a network for another number of joints',
      { ...versionToWire(smallVersion(1, 3)), checksum: versionSnapshot(smallVersion(1, 3), joints).checksum },
      'artefact-unreadable',
      /for 3 joints/,
    ],
    ['in another format', { format: 'someone-elses' }, 'invalid-request', /heftwise-version-1/],
  ])('%s', async (_, change, slug, detail) => {
    const { key } = await teamWithModel()

    const refused = await key.post('/v1/models/tinker-base/versions', { ...good, ...change })

    expect(refused.status).toBe(422)
    expect(refused.body.type).toBe(`tag:heftwise.invalid,2026:${slug}`)
    expect(refused.body.detail).toMatch(detail)
    expect((await key.get('/v1/models/tinker-base')).body.newest_version).toBeNull()
  })
})

test('versions are listed newest first, page after page', async () => {
  const { key } = await teamWithModel()
  for (const seed of [1, 2, 3]) await key.post('/v1/models/tinker-base/versions', versionSnapshot(smallVersion(seed), joints))

  const first = await key.get('/v1/models/tinker-base/versions?limit=2')
  const second = await key.get(`/v1/models/tinker-base/versions?limit=2&cursor=${first.body.next_cursor}`)

  expect(first.body.items.map((item: { version: number }) => item.version)).toEqual([3, 2])
  expect(second.body.items.map((item: { version: number }) => item.version)).toEqual([1])
  expect(second.body.next_cursor).toBeNull()
})

test.each(['1e999', '"a"', 'null'])('a cursor that holds %s is refused', async (value) => {
  const { key } = await teamWithModel()
  const cursor = Buffer.from(`[${value}]`).toString('base64url')

  for (const list of ['versions', 'releases']) {
    const answer = await key.get(`/v1/models/tinker-base/${list}?cursor=${cursor}`)
    expect([answer.status, answer.body.errors[0].pointer]).toEqual([422, 'cursor'])
  }
})

test('an archived model takes no versions but can still be read', async () => {
  const { key } = await teamWithModel()
  await key.post('/v1/models/tinker-base/versions', versionSnapshot(smallVersion(), joints))

  await key.post('/v1/models/tinker-base/archive', { reason: 'Replaced.' })

  const refused = await key.post('/v1/models/tinker-base/versions', versionSnapshot(smallVersion(2), joints))
  expect(refused.body.type).toBe('tag:heftwise.invalid,2026:archived')
  expect((await key.get('/v1/models/tinker-base/versions/1')).status).toBe(200)
})

test("another team's model, version and snapshot are not there", async () => {
  const { key } = await teamWithModel()
  await key.post('/v1/models/tinker-base/versions', versionSnapshot(smallVersion(), joints))
  const other = await (await server.createTeam()).createKey(['build', 'read', 'release', 'predict'])

  for (const path of ['', '/versions', '/versions/1', '/versions/1/snapshot', '/releases']) {
    expect((await other.get(`/v1/models/tinker-base${path}`)).status, path).toBe(404)
  }
  expect((await other.post('/v1/models/tinker-base/versions', versionSnapshot(smallVersion(), joints))).status).toBe(404)
})

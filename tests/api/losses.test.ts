import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import { twoJointArm } from '../support/recording-csv.ts'
import { startTestServer, type TestServer } from '../support/server.ts'
import { lossSnapshot, smallLoss, smallVersion, versionSnapshot } from '../support/versions.ts'

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

const base = versionSnapshot(smallVersion(), ['swivel', 'lift'])

async function teamWithLoss(kind = 'state_dependent') {
  const key = await (await server.createTeam()).createKey(['build', 'read'])
  await key.post('/v1/arms', twoJointArm())
  await key.post('/v1/models', { name: 'tinker-base', arm: 'tinker-2' })
  await key.post('/v1/models/tinker-base/versions', base)
  await key.post('/v1/losses', { name: 'tinker-payload', model: 'tinker-base', kind })
  return key
}

test('an imported loss version names its base and comes back unchanged', async () => {
  const key = await teamWithLoss()
  const snapshot = lossSnapshot(smallLoss(base.checksum))

  const imported = await key.post('/v1/losses/tinker-payload/versions', snapshot)

  expect(imported.status).toBe(201)
  expect(imported.body).toMatchObject({
    loss: 'tinker-payload',
    version: 1,
    kind: 'state_dependent',
    base_version: 1,
    base_checksum: base.checksum,
    scheme: 'all',
    update: { kind: 'sgd', rate: 0.02, rows_per_step: 4 },
    checksum: snapshot.checksum,
    origin: { kind: 'imported' },
  })
  const exported = await key.get('/v1/losses/tinker-payload/versions/1/snapshot')
  expect(exported.body).toEqual(snapshot)
  const repeated = await key.get('/v1/losses/tinker-payload/versions/1/snapshot', {
    headers: { 'if-none-match': exported.headers.get('etag')! },
  })
  expect(repeated.status).toBe(304)
  expect((await key.get('/v1/losses/tinker-payload')).body.newest_version).toBe(1)
  expect((await key.get('/v1/losses/tinker-payload/versions')).body.items).toEqual([imported.body])
  expect((await key.get('/v1/losses/tinker-payload/versions/1')).body).toEqual(imported.body)
})

describe('a loss import is refused', () => {
  const good = lossSnapshot(smallLoss(base.checksum))
  test.each([
    [
      'for a base that the model does not have',
      lossSnapshot(smallLoss('ab'.repeat(32))),
      'loss-of-another-base',
      /Import that version first/,
    ],
    [
      'with changed parameters',
      { ...good, parameters: lossSnapshot(smallLoss(base.checksum, 1)).parameters },
      'artefact-unreadable',
      /parameters/,
    ],
    ['with another checksum', { ...good, checksum: base.checksum }, 'artefact-unreadable', /changed on the way/],
    ['with a changed rate', { ...good, update: { ...good.update, rate: 0.03 } }, 'artefact-unreadable', /changed on the way/],
    ['without its rate', { ...good, update: { kind: 'sgd' } }, 'artefact-unreadable', /update\.rate is missing/],
    ['of another kind', { ...good, kind: 'structured' }, 'artefact-unreadable', /of kind structured/],
    ['for another number of joints', lossSnapshot(smallLoss(base.checksum, 3)), 'artefact-unreadable', /3 joints/],
  ])('%s', async (_, snapshot, slug, detail) => {
    const key = await teamWithLoss()

    const refused = await key.post('/v1/losses/tinker-payload/versions', snapshot)

    expect(refused.body.type).toBe(`tag:heftwise.invalid,2026:${slug}`)
    expect(refused.body.detail).toMatch(detail)
  })
})

test('plain squared error needs no loss of its own', async () => {
  const key = await teamWithLoss()

  const refused = await key.post('/v1/losses', { name: 'plain', model: 'tinker-base', kind: 'mse' })

  expect(refused.status).toBe(422)
  expect(refused.body.type).toBe('tag:heftwise.invalid,2026:setting-refused')
})

test('losses are listed by name, of one model if asked, and names are taken once', async () => {
  const key = await teamWithLoss()
  await key.post('/v1/models', { name: 'tinker-two', arm: 'tinker-2' })
  await key.post('/v1/losses', { name: 'ahead-of-it', model: 'tinker-two', kind: 'structured' })

  expect((await key.get('/v1/losses')).body.items.map((loss: { name: string }) => loss.name)).toEqual([
    'ahead-of-it',
    'tinker-payload',
  ])
  expect((await key.get('/v1/losses?model=tinker-two')).body.items).toHaveLength(1)
  expect((await key.post('/v1/losses', { name: 'ahead-of-it', model: 'tinker-two', kind: 'structured' })).status).toBe(409)
})

test("another team's loss is not there", async () => {
  const key = await teamWithLoss()
  await key.post('/v1/losses/tinker-payload/versions', lossSnapshot(smallLoss(base.checksum)))
  const other = await (await server.createTeam()).createKey(['build', 'read'])

  for (const path of ['', '/versions', '/versions/1', '/versions/1/snapshot']) {
    expect((await other.get(`/v1/losses/tinker-payload${path}`)).status, path).toBe(404)
  }
})

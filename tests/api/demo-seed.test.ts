import { afterAll, beforeAll, expect, test } from 'vitest'
import { seedDemo } from '../../server/demo/seed.ts'
import { startTestServer, type TestServer } from '../support/server.ts'

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

test('the demo team gets its arm, a live version, a loss for it and recordings; once more changes nothing', async () => {
  const team = await server.createTeam()
  const key = await team.createKey(['read', 'predict', 'adapt'])

  await seedDemo(server.services, team.caller('administrator'))
  await seedDemo(server.services, team.caller('administrator'))

  const model = (await key.get('/v1/models/alder-7-base')).body
  expect(model).toMatchObject({ arm: 'alder-7', live_version: 1, newest_version: 1 })
  const version = (await key.get('/v1/models/alder-7-base/versions/1')).body
  expect(version.origin).toEqual({ kind: 'imported' })
  const loss = (await key.get('/v1/losses/alder-7-payload/versions/1')).body
  expect(loss).toMatchObject({ base_checksum: version.checksum, scheme: 'all', kind: 'state_dependent' })
  const recordings = (await key.get('/v1/recordings')).body.items
  expect(new Set(recordings.map((recording: { use: string }) => recording.use))).toEqual(
    new Set(['fit', 'meta_train', 'validate', 'evaluate']),
  )
  expect((await key.get('/v1/models/alder-7-base/releases')).body.items).toHaveLength(1)
  const adaptation = await key.post('/v1/adaptations', {
    model: 'alder-7-base',
    loss: { name: 'alder-7-payload' },
    robot: 'kiln-cart-loader-1',
  })
  expect(adaptation.status).toBe(201)
}, 120_000)

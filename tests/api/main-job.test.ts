import { readFileSync } from 'node:fs'
import { gunzipSync } from 'node:zlib'
import { afterAll, beforeAll, expect, test } from 'vitest'
import { jointsOfUrdf } from '../../sdk/examples/urdf-joints.ts'
import type { ApiClient } from '../support/api.ts'
import { startTestServer, type TestServer } from '../support/server.ts'

// The recordings are simulated: tests/data/heron-7/README.md.

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

const csvOf = (name: string) => gunzipSync(readFileSync(`tests/data/heron-7/${name}.csv.gz`)).toString()

async function upload(key: ApiClient, name: string, use: string) {
  const data = new FormData()
  data.set('arm', 'heron-7')
  data.set('use', use)
  data.set('file', new Blob([csvOf(name)]), `${name}.csv`)
  expect((await key.post('/v1/recordings', data)).status, name).toBe(201)
}

async function ended(key: ApiClient, body: object) {
  const job = await key.post('/v1/jobs', body)
  expect(job.status, JSON.stringify(job.body)).toBe(201)
  await expect
    .poll(async () => (await key.get(`/v1/jobs/${job.body.id}`)).body.state, { timeout: 120_000, interval: 200 })
    .toMatch(/done|failed|cancelled/)
  const { body: done } = await key.get(`/v1/jobs/${job.body.id}`)
  expect(done.state, JSON.stringify(done.problem)).toBe('done')
  return done.result
}

/** Rows of a recording as a batch takes them, by the columns' own names. */
function rowsOf(name: string, joints: string[], from: number, count: number) {
  const [header, ...lines] = csvOf(name)
    .trim()
    .split('\n')
    .map((line) => line.split(','))
  const rows = lines.slice(from, from + count)
  const matrix = (quantity: string) =>
    rows.map((row) => joints.map((joint) => Number(row[header!.indexOf(`${quantity}_${joint}`)])))
  return {
    time: rows.map((row) => Number(row[0])),
    position: matrix('position'),
    velocity: matrix('velocity'),
    acceleration: matrix('acceleration'),
    torque: matrix('effort'),
  }
}

test('recordings become a live version, a learned loss and an adaptation that follows a payload', async () => {
  const key = await (await server.createTeam()).createKey(['build', 'read', 'release', 'predict', 'adapt'])
  const { name, joints } = jointsOfUrdf(readFileSync('tests/data/heron-7.urdf', 'utf8'))
  const arm = await key.post('/v1/arms', {
    name,
    joints,
    gravity: [0, 0, -9.81],
    fallback: 'controlled_stop',
    torque: { side: 'link', positive_accelerates: true, controller_adds: [] },
  })
  expect(arm.status).toBe(201)
  for (const file of ['fit-1', 'fit-2', 'fit-3']) await upload(key, file, 'fit')
  for (const file of ['meta-train-1', 'meta-train-2']) await upload(key, file, 'meta_train')
  await upload(key, 'validate-1', 'validate')
  await key.post('/v1/models', { name: 'heron-7-base', arm: name })
  await key.post('/v1/losses', { name: 'heron-7-payload', model: 'heron-7-base', kind: 'state_dependent' })

  const fitted = await ended(key, { kind: 'fit', model: 'heron-7-base', hidden: [24], epochs: 20, rows_per_step: 32 })
  const etag = (await key.get('/v1/models/heron-7-base')).headers.get('etag')!
  await key.post(
    '/v1/models/heron-7-base/releases',
    { version: fitted.version, reason: 'First fit.' },
    { headers: { 'if-match': etag } },
  )
  const learned = await ended(key, {
    kind: 'meta_train',
    loss: 'heron-7-payload',
    updates: 4,
    inner_steps: 5,
    streams: 2,
    hidden: 8,
  })
  const started = await key.post('/v1/adaptations', {
    model: 'heron-7-base',
    loss: { name: 'heron-7-payload', version: learned.version },
    robot: 'bench 1',
  })

  expect(started.status, JSON.stringify(started.body)).toBe(201)
  expect(started.body).toMatchObject({
    version: 1,
    scheme: 'all',
    state: 'adapting',
    revision: 0,
    loss: { name: 'heron-7-payload', version: 1 },
  })
  const joint_names = joints.map((joint) => joint.name)
  const errors: number[] = []
  for (let sequence = 1; sequence <= 10; sequence++) {
    const rows = rowsOf('evaluate-1', joint_names, (sequence - 1) * 8, 8)
    const { status, body } = await key.post(`/v1/adaptations/${started.body.id}/batches`, {
      sequence,
      joint_names,
      acceleration_kind: 'filtered',
      ...rows,
    })
    expect(status, JSON.stringify(body)).toBe(200)
    errors.push(body.error.before)
  }
  const [first, last] = [errors[0]!, errors.at(-1)!]
  expect(last, `errors before each batch: ${errors.join(', ')}`).toBeLessThan(first)
  const { position, velocity, acceleration } = rowsOf('evaluate-1', joint_names, 80, 4)
  const predicted = await key.post(`/v1/adaptations/${started.body.id}/predict`, {
    joint_names,
    position,
    velocity,
    acceleration,
  })
  expect(predicted.body).toMatchObject({ model: 'heron-7-base', version: 1, joint_names })
  expect(predicted.body.revision).toBeGreaterThan(0)
}, 240_000)

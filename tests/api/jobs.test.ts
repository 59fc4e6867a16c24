import { afterAll, beforeAll, describe, expect, test, vi } from 'vitest'
import { fitDefaults, metaTrainDefaults } from '../../server/services/jobs/job-requests.ts'
import { readEvents } from '../../sdk/server-sent-events.ts'
import type { ApiClient } from '../support/api.ts'
import { twoJointArm, twoJointCsv } from '../support/recording-csv.ts'
import { startTestServer, type TestServer } from '../support/server.ts'
import { smallVersion, versionSnapshot } from '../support/versions.ts'

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

// A job's thread loads its code anew, at low priority: seconds on a busy machine.
vi.setConfig({ testTimeout: 120_000 })

const tinyFit = { hidden: [8], epochs: 2, rows_per_step: 64 }
const tinyMetaTrain = { updates: 3, inner_steps: 3, streams: 2, hidden: 4 }

async function upload(key: ApiClient, use: string, seed: number, payload = 0, rows = 200): Promise<{ id: string; name: string }> {
  const data = new FormData()
  data.set('arm', 'tinker-2')
  data.set('use', use)
  data.set('file', new Blob([twoJointCsv({ seed, payload, rows })]), `${use}-${seed}.csv`)
  const { status, body } = await key.post('/v1/recordings', data)
  expect(status, JSON.stringify(body)).toBe(201)
  return body
}

async function teamWithRecordings() {
  const team = await server.createTeam()
  const key = await team.createKey(['build', 'read', 'release', 'predict'])
  await key.post('/v1/arms', twoJointArm())
  await key.post('/v1/models', { name: 'tinker-base', arm: 'tinker-2' })
  await key.post('/v1/losses', { name: 'tinker-payload', model: 'tinker-base', kind: 'state_dependent' })
  const fit = [await upload(key, 'fit', 1), await upload(key, 'fit', 2), await upload(key, 'fit', 3)]
  const metaTrain = [await upload(key, 'meta_train', 4, 1), await upload(key, 'meta_train', 5, 2)]
  const validate = await upload(key, 'validate', 6, 1.5)
  const evaluate = await upload(key, 'evaluate', 7, 1.5)
  return { team, key, fit, metaTrain, validate, evaluate }
}

async function ended(key: ApiClient, id: string) {
  await expect
    .poll(async () => (await key.get(`/v1/jobs/${id}`)).body.state, { timeout: 110_000, interval: 100 })
    .toMatch(/done|failed|cancelled/)
  return (await key.get(`/v1/jobs/${id}`)).body
}

const importVersion = (key: ApiClient) =>
  key.post('/v1/models/tinker-base/versions', versionSnapshot(smallVersion(), ['swivel', 'lift']))

test('a fitting makes a version with metrics on the recordings it did not see', async () => {
  const { team, key, fit } = await teamWithRecordings()

  const job = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...tinyFit })

  expect(job.status).toBe(201)
  expect(job.body.parameters).toMatchObject({
    hidden: [8],
    activation: 'relu',
    recordings: fit.map(({ id }) => id),
    held_out: [fit[2].id],
  })
  const done = await ended(key, job.body.id)
  expect(done, JSON.stringify(done.problem)).toMatchObject({
    state: 'done',
    progress: 1,
    result: { model: 'tinker-base', version: 1 },
  })
  const { body: version } = await key.get('/v1/models/tinker-base/versions/1')
  expect(version).toMatchObject({
    origin: { kind: 'fitted', job: job.body.id },
    network: { sizes: [6, 8, 2], activation: 'relu' },
  })
  expect(version.origin.recordings.map((recording: { name: string }) => recording.name)).toEqual([
    'fit-1.csv',
    'fit-2.csv',
    'fit-3.csv',
  ])
  expect(version.metrics.recordings.map((recording: { name: string }) => recording.name)).toEqual(['fit-3.csv'])
  expect(version.metrics.per_joint).toMatchObject([
    { joint: 'swivel', unit: 'N·m' },
    { joint: 'lift', unit: 'N·m' },
  ])
  expect(version.recommended).toMatchObject({
    scheme: 'all',
    update: { kind: expect.stringMatching(/sgd|adam/), rate: expect.any(Number), rows_per_step: 4 },
  })
  const { body: curve } = await key.get(`/v1/jobs/${job.body.id}/curve`)
  expect(curve.series).toMatchObject([
    {
      name: 'training',
      points: [
        [1, expect.any(Number)],
        [2, expect.any(Number)],
      ],
    },
    { name: 'held out' },
  ])
  const actions = (await server.database.models.AuditEvent.findAll({ where: { teamId: team.id } })).map(({ action }) => action)
  expect(actions).toEqual(expect.arrayContaining(['job.create', 'version.fitted']))
})

test('the same fitting again gives the same numbers', async () => {
  const { key } = await teamWithRecordings()
  const checksums: string[] = []

  for (let k = 0; k < 2; k++) {
    const job = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...tinyFit })
    const { result } = await ended(key, job.body.id)
    checksums.push((await key.get(`/v1/models/tinker-base/versions/${result.version}`)).body.checksum)
  }

  expect(checksums[0]).toBe(checksums[1])
})

test('a meta-training makes a loss version for the base, with everything compared on validation recordings', async () => {
  const { key, metaTrain, validate } = await teamWithRecordings()
  const { body: base } = await importVersion(key)

  const job = await key.post('/v1/jobs', { kind: 'meta_train', loss: 'tinker-payload', ...tinyMetaTrain })

  expect(job.body.parameters).toMatchObject({
    version: 1,
    scheme: 'all',
    recordings: metaTrain.map(({ id }) => id),
    validation: [validate.id],
    inner_steps: 3,
  })
  const done = await ended(key, job.body.id)
  expect(done, JSON.stringify(done.problem)).toMatchObject({ state: 'done', result: { loss: 'tinker-payload', version: 1 } })
  const { body: version } = await key.get('/v1/losses/tinker-payload/versions/1')
  expect(version).toMatchObject({
    kind: 'state_dependent',
    base_version: 1,
    base_checksum: base.checksum,
    scheme: 'all',
    origin: { kind: 'meta_trained', job: job.body.id },
  })
  expect(version.validation.map((entry: { name: string }) => entry.name)).toEqual([
    'none',
    'mse, sgd',
    'mse, adam',
    'state_dependent',
  ])
  const { body: curve } = await key.get(`/v1/jobs/${job.body.id}/curve`)
  expect(curve.series.map((series: { name: string }) => series.name)).toContain('outer error')
  const { body: snapshot } = await key.get('/v1/losses/tinker-payload/versions/1/snapshot')
  expect((await key.post('/v1/losses/tinker-payload/versions', snapshot)).body).toMatchObject({
    version: 2,
    checksum: version.checksum,
  })
})

describe('a job is refused by name of the recording', () => {
  test.each(['meta_train', 'validate', 'evaluate'] as const)('when a fitting is given one with use %s', async (use) => {
    const made = await teamWithRecordings()
    const wrong = use === 'meta_train' ? made.metaTrain[0] : made[use]

    const refused = await made.key.post('/v1/jobs', {
      kind: 'fit',
      model: 'tinker-base',
      recordings: [made.fit[0].id, made.fit[1].id, wrong.id],
    })

    expect(refused.status).toBe(422)
    expect(refused.body.type).toBe('tag:heftwise.invalid,2026:recordings-unsuitable')
    expect(refused.body.detail).toContain(`"${wrong.name}" has use ${use}`)
    expect(refused.body.errors[0].pointer).toBe('/recordings/2')
  })

  test('when a meta-training is given one for evaluation, or chooses rates on one for training', async () => {
    const { key, metaTrain, evaluate } = await teamWithRecordings()
    await importVersion(key)
    const ask = (more: object) => key.post('/v1/jobs', { kind: 'meta_train', loss: 'tinker-payload', ...more })

    expect((await ask({ recordings: [evaluate.id] })).body.detail).toContain(`"${evaluate.name}" has use evaluate`)
    expect((await ask({ validation: [metaTrain[0].id] })).body.detail).toContain(`"${metaTrain[0].name}" has use meta_train`)
    expect((await ask({ inner_steps: 100 })).body.detail).toMatch(/has 200 rows.*need 404/)
  })

  test("when it is another arm's, another team's, or nobody's", async () => {
    const { key, fit } = await teamWithRecordings()
    const other = await teamWithRecordings()
    const ask = (id: string) => key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', recordings: [fit[0].id, id] })

    expect((await ask(other.fit[0].id)).body.detail).toMatch(/no recording .* in your team/)
    expect((await ask('0193a5c2-7d1e-7cc0-a1b2-3c4d5e6f7081')).status).toBe(422)
  })

  test('when what is held out leaves nothing, or is not among them', async () => {
    const { key, fit } = await teamWithRecordings()
    const ask = (more: object) => key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...more })

    expect((await ask({ recordings: [fit[0].id] })).body.detail).toMatch(/nothing is left to learn from/)
    expect((await ask({ recordings: [fit[0].id, fit[1].id], held_out: [fit[2].id] })).body.detail).toContain(fit[2].name)
  })

  test('and a meta-training without any base version says so', async () => {
    const { key } = await teamWithRecordings()

    expect((await key.post('/v1/jobs', { kind: 'meta_train', loss: 'tinker-payload' })).body.type).toBe(
      'tag:heftwise.invalid,2026:no-live-version',
    )
  })
})

describe('cancelling', () => {
  test('a running job stops it within seconds and makes no version', async () => {
    const { key } = await teamWithRecordings()
    const job = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', epochs: 2000, hidden: [64, 64] })
    await expect
      .poll(async () => (await key.get(`/v1/jobs/${job.body.id}`)).body.progress, { timeout: 30_000 })
      .toBeGreaterThan(0)

    const cancelled = await key.post(`/v1/jobs/${job.body.id}/cancel`, { reason: 'Wrong recordings.' })

    expect(cancelled.status).toBe(200)
    expect(await ended(key, job.body.id)).toMatchObject({ state: 'cancelled', result: null, problem: null })
    expect((await key.get('/v1/models/tinker-base')).body.newest_version).toBeNull()
    expect((await key.post(`/v1/jobs/${job.body.id}/cancel`, { reason: 'Once more.' })).body.type).toBe(
      'tag:heftwise.invalid,2026:job-ended',
    )
  })

  test('a queued job ends it at once, and the next in line runs', async () => {
    const { key } = await teamWithRecordings()
    const long = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', epochs: 2000, hidden: [64, 64] })
    const second = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...tinyFit })
    const third = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...tinyFit })

    const cancelled = await key.post(`/v1/jobs/${second.body.id}/cancel`, { reason: 'Not needed.' })
    await key.post(`/v1/jobs/${long.body.id}/cancel`, { reason: 'Not needed.' })

    expect(cancelled.body.state).toBe('cancelled')
    expect((await ended(key, third.body.id)).state).toBe('done')
  })
})

test('a job whose recording was deleted while it waited fails, and says which', async () => {
  const { key, fit } = await teamWithRecordings()
  await server.services.jobs.stop()
  const { body } = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...tinyFit })
  await key.delete(`/v1/recordings/${fit[1].id}?reason=Wrong+payload.`)

  await server.services.jobs.start()

  expect(await ended(key, body.id)).toMatchObject({
    state: 'failed',
    problem: { type: 'tag:heftwise.invalid,2026:recordings-unsuitable', detail: expect.stringContaining(fit[1].id) },
  })
})

test('a job whose process has gone is failed, to be run again', async () => {
  const { team, key } = await teamWithRecordings()
  const { body } = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', epochs: 2000, hidden: [64, 64] })
  await expect.poll(async () => (await key.get(`/v1/jobs/${body.id}`)).body.state, { timeout: 30_000 }).toBe('running')

  // What is left in the database when a process is killed: a lease that nobody renews, held by nobody who lives.
  await server.database.pool.query(
    "UPDATE jobs SET lease_owner = 'gone', lease_until = UTC_TIMESTAMP(3) - INTERVAL 1 SECOND WHERE id = ?",
    [body.id],
  )

  const failed = await ended(key, body.id)
  expect(failed).toMatchObject({
    state: 'failed',
    result: null,
    problem: { detail: expect.stringMatching(/Start the job again/) },
  })
  const again = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...tinyFit })
  expect((await ended(key, again.body.id)).state).toBe('done')
  expect(
    await server.database.models.Version.count({ where: { teamId: team.id } }),
    'the one that lost its lease stored nothing',
  ).toBe(1)
})

test('stopping a server fails what it ran', async () => {
  const { key } = await teamWithRecordings()
  const other = await server.another()
  await server.services.jobs.stop()
  const { body } = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', epochs: 2000, hidden: [64, 64] })
  await expect.poll(async () => (await key.get(`/v1/jobs/${body.id}`)).body.state, { timeout: 30_000 }).toBe('running')

  await other.stop()
  await server.services.jobs.start()

  expect((await key.get(`/v1/jobs/${body.id}`)).body).toMatchObject({
    state: 'failed',
    problem: { detail: expect.stringMatching(/stopped while this job ran/) },
  })
})

test('two processes never work on the same job', async () => {
  const { key } = await teamWithRecordings()
  const other = await server.another()
  try {
    const asked = await Promise.all(
      Array.from({ length: 3 }, () => key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...tinyFit })),
    )
    const jobs = []
    for (const { body } of asked) jobs.push(await ended(key, body.id))

    expect(jobs.map(({ state }) => state)).toEqual(['done', 'done', 'done'])
    expect(jobs.map(({ result }) => result.version).sort()).toEqual([1, 2, 3])
  } finally {
    await other.stop()
  }
})

describe('the stream of a job', () => {
  async function follow(secret: string, id: string, lastEventId?: string) {
    const response = await fetch(`${server.origin}/v1/jobs/${id}/events`, {
      headers: { authorization: `Bearer ${secret}`, ...(lastEventId !== undefined && { 'last-event-id': lastEventId }) },
    })
    const events = []
    for await (const event of readEvents(response.body!)) events.push(event)
    return { response, events }
  }

  test('tells every change and point, ends with the job, and goes on after Last-Event-ID', async () => {
    const { key } = await teamWithRecordings()
    const { body } = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...tinyFit, epochs: 4 })

    const { response, events } = await follow(key.secret, body.id)

    expect(response.headers.get('content-type')).toMatch(/^text\/event-stream/)
    const jobs = events.filter(({ event }) => event === 'job').map(({ data }) => JSON.parse(data))
    expect(jobs.at(-1)).toMatchObject({ id: body.id, state: 'done', progress: 1 })
    const points = events.filter(({ event }) => event === 'point').map(({ data }) => JSON.parse(data))
    expect(points).toHaveLength(8)
    expect(points[0]).toEqual({ series: 'training', x: 1, y: expect.any(Number) })

    // A reader that lost the connection goes on after the last id it saw, and is told nothing twice.
    const middle = events.findIndex(({ event }) => event === 'point') + 3
    const { events: rest } = await follow(key.secret, body.id, events[middle].id)
    const pointsOf = (list: typeof events) => list.filter(({ event }) => event === 'point').map(({ data }) => data)
    expect(pointsOf(rest)).toEqual(pointsOf(events.slice(middle + 1)))
    expect((await follow(key.secret, body.id, events.at(-1)!.id)).events).toEqual([])
  })

  test("of another team's job is not there", async () => {
    const { key } = await teamWithRecordings()
    const { body } = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...tinyFit })
    const other = await (await server.createTeam()).createKey(['build', 'read'])

    for (const path of ['', '/curve', '/events']) expect((await other.get(`/v1/jobs/${body.id}${path}`)).status, path).toBe(404)
    expect((await other.post(`/v1/jobs/${body.id}/cancel`, { reason: 'not mine' })).status).toBe(404)
    await key.post(`/v1/jobs/${body.id}/cancel`, { reason: 'Seen enough.' })
  })
})

test('jobs are listed newest first, by kind and state', async () => {
  const { key } = await teamWithRecordings()
  await importVersion(key)
  const first = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', ...tinyFit })
  const second = await key.post('/v1/jobs', { kind: 'meta_train', loss: 'tinker-payload', ...tinyMetaTrain })
  for (const { body } of [second, first]) {
    await key.post(`/v1/jobs/${body.id}/cancel`, { reason: 'Only for the list.' })
    await ended(key, body.id)
  }

  const ids = async (query: string) => (await key.get(`/v1/jobs${query}`)).body.items.map((job: { id: string }) => job.id)

  expect(await ids('')).toEqual([second.body.id, first.body.id])
  expect(await ids('?kind=fit')).toEqual([first.body.id])
  expect(await ids('?state=cancelled&limit=1')).toEqual([second.body.id])
  expect(await ids('?state=failed')).toEqual([])
})

test('predictions are answered while a job computes', async () => {
  const { key } = await teamWithRecordings()
  await importVersion(key)
  const { body } = await key.post('/v1/jobs', { kind: 'fit', model: 'tinker-base', epochs: 2000, hidden: [128, 128] })
  await expect.poll(async () => (await key.get(`/v1/jobs/${body.id}`)).body.progress, { timeout: 30_000 }).toBeGreaterThan(0)
  const row = [[0.1, 0.2]]

  const times: number[] = []
  for (let k = 0; k < 50; k++) {
    const at = performance.now()
    await key.post('/v1/models/tinker-base/predict', {
      joint_names: ['swivel', 'lift'],
      version: 1,
      position: row,
      velocity: row,
      acceleration: row,
    })
    times.push(performance.now() - at)
  }
  await key.post(`/v1/jobs/${body.id}/cancel`, { reason: 'Seen enough.' })
  await ended(key, body.id)

  // An epoch on the event loop would block for seconds; the bound leaves room for a busy machine.
  expect(times.sort((a, b) => a - b)[25]).toBeLessThan(100)
})

test('defaults are those of the training code', async () => {
  const { defaultFitOptions } = await import('../../server/jobs/training/fit-network.ts')
  const { defaultMetaTrainingOptions } = await import('../../shared/dynamics/meta-training.ts')

  expect(fitDefaults).toEqual(defaultFitOptions)
  expect(defaultMetaTrainingOptions).toMatchObject(metaTrainDefaults)
})

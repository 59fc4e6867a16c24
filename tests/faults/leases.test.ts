import { createServer, request } from 'node:http'
import type { AddressInfo } from 'node:net'
import { afterAll, beforeAll, expect, test } from 'vitest'
import type { ApiClient } from '../support/api.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer, TestTeam } from '../support/server.ts'
import { serveModel, simulatedMotion } from '../support/served-model.ts'
import type { ServedModel } from '../support/served-model.ts'

let one: TestServer
let two: TestServer
let served: ServedModel
let key: ApiClient & { secret: string }
let other: ApiClient
let team: TestTeam

beforeAll(async () => {
  one = await startTestServer()
  two = await one.another()
  team = await one.createTeam()
  key = await team.createKey(['predict', 'adapt', 'read'])
  other = two.api(key.secret)
  served = await serveModel(one, team.caller(), { joints: 3 })
})
afterAll(async () => {
  await two.stop()
  await one.stop()
})

async function start() {
  const { body } = await key.post('/v1/adaptations', { model: 'tinker', loss: 'mse', robot: 'shared', update: { kind: 'sgd', rate: 0.02 } })
  return `/v1/adaptations/${body.id}`
}

const batch = (sequence: number) => ({
  joints: served.fingerprint, sequence, acceleration_kind: 'filtered', ...simulatedMotion({ joints: 3, rows: 16, start: sequence * 16 * 0.02, payload: 1, seed: 3 }),
})

const idOf = (path: string) => path.split('/').at(-1)!
const holderOf = async (path: string) => {
  const [row] = await one.database.pool.query<{ lease_holder: string | null }[]>('SELECT lease_holder FROM adaptations WHERE id = ?', [idOf(path)])
  return row.lease_holder
}

/** The same batches by one process alone. */
async function reference(count: number) {
  const path = await start()
  for (let sequence = 1; sequence <= count; sequence++) expect((await key.post(`${path}/batches`, batch(sequence))).status).toBe(200)
  return (await key.get(`${path}/snapshot`)).body.state
}

test('whichever process is asked, the one that holds the adaptation answers', async () => {
  const path = await start()

  for (let sequence = 1; sequence <= 10; sequence++) {
    const answer = await (sequence % 2 === 0 ? key : other).post(`${path}/batches`, batch(sequence))
    expect([answer.status, answer.body.revision]).toEqual([200, sequence])
  }

  expect((await key.get(`${path}/snapshot`)).body.state).toEqual(await reference(10))
  expect((await key.post(`${path}/freeze`, { reason: 'Through the other process.' })).body.state).toBe('frozen')
  expect((await other.post(`${path}/batches`, batch(11))).body.verdict).toBe('stored')
  const motion = simulatedMotion({ joints: 3, rows: 2 })
  const ask = { joints: served.fingerprint, position: motion.position, velocity: motion.velocity, acceleration: motion.acceleration }
  expect((await key.post(`${path}/predict`, ask)).body).toEqual((await other.post(`${path}/predict`, ask)).body)
  expect((await other.post(`${path}/events`, { sequence: 12, time: 9, kind: 'gripped' })).status).toBe(200)
  expect(await holderOf(path)).toBe(two.services.adaptations.processId)
})

test('a holder that another process has taken over from cannot write, and learns of it', async () => {
  const path = await start()
  for (let sequence = 1; sequence <= 3; sequence++) await key.post(`${path}/batches`, batch(sequence))
  expect(await holderOf(path)).toBe(one.services.adaptations.processId)
  // As if the first had been paused for longer than its lease: it believes it holds the adaptation.
  await one.database.pool.query('UPDATE adaptations SET lease_holder = NULL, lease_epoch = lease_epoch + 1 WHERE id = ?', [idOf(path)])
  const [before] = await one.database.pool.query<{ count: number }[]>('SELECT COUNT(*) AS count FROM adaptation_log WHERE adaptation_id = ?', [idOf(path)])

  const fenced = await key.post(`${path}/batches`, batch(4))

  expect([fenced.status, fenced.body.type]).toEqual([503, 'tag:heftwise.invalid,2026:held-elsewhere'])
  const [after] = await one.database.pool.query<{ count: number }[]>('SELECT COUNT(*) AS count FROM adaptation_log WHERE adaptation_id = ?', [idOf(path)])
  expect(after.count).toBe(before.count)
  for (let sequence = 4; sequence <= 6; sequence++) expect((await other.post(`${path}/batches`, batch(sequence))).status).toBe(200)
  expect(await holderOf(path)).toBe(two.services.adaptations.processId)
  expect((await key.get(`${path}/snapshot`)).body.state).toEqual(await reference(6))
})

test('while a holder is alive but cannot be reached, the answer is to come back; when its lease has run out, another takes over', async () => {
  const path = await start()
  await key.post(`${path}/batches`, batch(1))
  const ghost = '01a00000-0000-7000-8000-000000000001'
  await one.database.pool.query("INSERT INTO server_processes (id, host, address, expires_at) VALUES (?, 'elsewhere', NULL, UTC_TIMESTAMP(3) + INTERVAL 2 SECOND)", [ghost])
  await one.database.pool.query('UPDATE adaptations SET lease_holder = ?, lease_epoch = lease_epoch + 1 WHERE id = ?', [ghost, idOf(path)])

  const held = await other.post(`${path}/batches`, batch(2))

  expect([held.status, held.body.type]).toEqual([503, 'tag:heftwise.invalid,2026:held-elsewhere'])
  expect(held.headers.get('retry-after')).toBe('1')
  await expect.poll(async () => (await other.post(`${path}/batches`, batch(2))).status, { timeout: 5_000, interval: 200 }).toBe(200)
})

test('a holder whose port is closed is taken over from at once', async () => {
  const path = await start()
  const third = await one.another()
  const elsewhere = third.api(key.secret)
  await elsewhere.post(`${path}/batches`, batch(1))
  const processId = third.services.adaptations.processId
  expect(await holderOf(path)).toBe(processId)
  await third.stop()
  // As kill -9 would leave it: the row alive, the lease held, nobody listening.
  await one.database.pool.query(
    "INSERT INTO server_processes (id, host, address, expires_at) VALUES (?, ?, ?, UTC_TIMESTAMP(3) + INTERVAL 60 SECOND)",
    [processId, (await import('node:os')).hostname(), third.origin],
  )
  await one.database.pool.query('UPDATE adaptations SET lease_holder = ? WHERE id = ?', [processId, idOf(path)])

  const answer = await key.post(`${path}/batches`, batch(2))

  expect([answer.status, answer.body.revision]).toEqual([200, 2])
})

test('a process that stops hands its adaptations over', async () => {
  const path = await start()
  const third = await one.another()
  await third.api(key.secret).post(`${path}/batches`, batch(1))

  await third.stop()

  expect(await holderOf(path)).toBeNull()
  expect((await other.post(`${path}/batches`, batch(2))).body.revision).toBe(2)
})

test('an answer that came through another process is kept whole for a repeated Idempotency-Key', async () => {
  const path = await start()
  await other.post(`${path}/batches`, batch(1))
  const options = { headers: { 'idempotency-key': 'freeze-once' } }

  const first = await key.post(`${path}/freeze`, { reason: 'Through the other process.' }, options)
  const again = await key.post(`${path}/freeze`, { reason: 'Through the other process.' }, options)

  expect([first.status, first.body.state]).toEqual([200, 'frozen'])
  expect([again.status, again.body]).toEqual([200, first.body])
})

test('the console reaches an adaptation that another process holds', async () => {
  const path = await start()
  await other.post(`${path}/batches`, batch(1))
  const engineer = await team.signIn('engineer')

  const answer = await engineer.post(`${path}/freeze`, { reason: 'From the console.' }, { headers: { origin: one.origin } })

  expect([answer.status, answer.body.state]).toEqual([200, 'frozen'])
})

test('a request line that names another host is not sent there', async () => {
  const path = await start()
  await other.post(`${path}/batches`, batch(1))
  const seen: string[] = []
  const elsewhere = createServer((req, res) => {
    seen.push(String(req.headers.authorization))
    res.end('{}')
  })
  await new Promise<void>((done) => elsewhere.listen(0, '127.0.0.1', done))
  const { port } = elsewhere.address() as AddressInfo

  // RFC 9112, section 3.2.2: the absolute form.
  const status = await new Promise((done, fail) => {
    const { hostname, port: own } = new URL(one.origin)
    const target = `http://127.0.0.1:${port}${path}/snapshot`
    request({ hostname, port: own, path: target, headers: { authorization: `Bearer ${key.secret}` } }, (res) => done(res.resume().statusCode)).on('error', fail).end()
  })
  await new Promise((done) => elsewhere.close(done))

  expect([status, seen]).toEqual([200, []])
})

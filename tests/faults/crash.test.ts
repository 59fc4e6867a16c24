import { afterAll, beforeAll, expect, test } from 'vitest'
import { ask, batchBody, startRig, streamBatches } from './rig.ts'
import type { Rig, ServerProcess } from './rig.ts'

let rig: Rig
beforeAll(async () => {
  rig = await startRig()
})
afterAll(() => rig.stop())

const snapshotOf = async (server: ServerProcess, id: string) => (await ask(server.port, rig.secret, 'GET', `/v1/adaptations/${id}/snapshot`)).body
const adaptationOf = async (server: ServerProcess, id: string) => (await ask(server.port, rig.secret, 'GET', `/v1/adaptations/${id}`)).body

/** What the same batches lead to when nothing happens. */
async function uninterrupted(server: ServerProcess, to: number, settings: Parameters<Rig['newAdaptation']>[0], rows?: number) {
  const id = await rig.newAdaptation(settings)
  const { answers } = await streamBatches(rig, id, { to, rows, portOf: () => server.port })
  return { answers, snapshot: await snapshotOf(server, id) }
}

test.each([['all', 'adam', 16], ['last_layer', 'sgd', 64], ['bias', 'sgd', 16]] as const)(
  'kill -9 of the server in the middle of a stream of batches loses nothing: weights equal an uninterrupted run to the bit (%s, %s, %i rows)',
  async (scheme, kind, rows) => {
    const settings = { scheme, update: { kind, rate: kind === 'adam' ? 0.002 : 0.02 } }
    const id = await rig.newAdaptation(settings)
    let server = await rig.startServer()
    let kills = 0
    const killing: Promise<void>[] = []

    // 200 entries pass a checkpoint; each kill comes while the next batch is under way.
    const { answers } = await streamBatches(rig, id, {
      to: 200, rows, portOf: () => server.port, onAnswer: (sequence) => {
        if (sequence !== 40 && sequence !== 110 && sequence !== 160) return
        const victim = server
        setTimeout(() => {
          killing.push(victim.kill('SIGKILL').then(async () => {
            kills++
            server = await rig.startServer()
          }))
        }, 3)
      },
    })
    await Promise.all(killing)

    const reference = await uninterrupted(server, 200, settings, rows)
    expect(kills).toBe(3)
    expect(answers).toEqual(reference.answers)
    const snapshot = await snapshotOf(server, id)
    expect(snapshot.revision).toBe(reference.snapshot.revision)
    expect(snapshot.revision).toBeGreaterThan(100)
    expect(snapshot.state).toEqual(reference.snapshot.state)
    expect(snapshot.as_of).toBe(reference.snapshot.as_of)
    await server.kill('SIGTERM')
  },
  180_000,
)

test('right after kill -9 and restart exactly what was acknowledged is there', async () => {
  const id = await rig.newAdaptation()
  const first = await rig.startServer()
  const { answers } = await streamBatches(rig, id, { to: 20, portOf: () => first.port })
  const before = await snapshotOf(first, id)

  await first.kill('SIGKILL')
  const second = await rig.startServer()

  expect(await adaptationOf(second, id)).toMatchObject({ revision: answers[19].revision, next_sequence: 21 })
  expect(await snapshotOf(second, id)).toEqual(before)
  const repeated = await ask(second.port, rig.secret, 'POST', `/v1/adaptations/${id}/batches`, batchBody(rig.served, 20, 16))
  expect(repeated.body).toEqual(answers[19])
  await second.kill('SIGKILL')
}, 60_000)

test('kill -9 of MariaDB in the middle of a stream of batches loses nothing either, and meanwhile answers say when to come back', async () => {
  const id = await rig.newAdaptation()
  const server = await rig.startServer()
  let kills = 0

  const { answers, failures } = await streamBatches(rig, id, {
    to: 120, portOf: () => server.port, onAnswer: (sequence) => {
      if (sequence !== 40 && sequence !== 90) return
      setTimeout(() => {
        rig.killMariaDb()
        kills++
      }, 2)
    },
  })

  const reference = await uninterrupted(server, 120, undefined)
  expect(kills).toBe(2)
  expect(failures).toBeGreaterThan(0)
  expect(answers).toEqual(reference.answers)
  const snapshot = await snapshotOf(server, id)
  expect([snapshot.revision, snapshot.state]).toEqual([reference.snapshot.revision, reference.snapshot.state])
  await server.kill('SIGKILL')
}, 180_000)

test('many adaptations that share transactions each keep their own order through kill -9 of MariaDB', async () => {
  const ids = await Promise.all(Array.from({ length: 8 }, () => rig.newAdaptation()))
  const server = await rig.startServer()
  setTimeout(() => rig.killMariaDb(), 600)

  const streams = await Promise.all(ids.map((id) => streamBatches(rig, id, { to: 40, portOf: () => server.port })))

  const reference = await uninterrupted(server, 40, undefined)
  for (const [k, { answers }] of streams.entries()) {
    expect(answers).toEqual(reference.answers)
    expect((await snapshotOf(server, ids[k])).state).toEqual(reference.snapshot.state)
  }
  await server.kill('SIGKILL')
}, 180_000)

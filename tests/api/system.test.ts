import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import { startTestServer } from '../support/server.ts'
import type { TestServer } from '../support/server.ts'

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

test('health and readiness need no credentials', async () => {
  expect((await server.api().get('/healthz')).body).toEqual({ status: 'ok' })
  expect((await server.api().get('/readyz')).body).toEqual({ status: 'ok' })
})

describe('request ids', () => {
  test('a sound one is repeated', async () => {
    const answer = await server.api().get('/healthz', { headers: { 'x-request-id': 'line-4.batch_17' } })

    expect(answer.headers.get('x-request-id')).toBe('line-4.batch_17')
  })

  test.each(['with space', 'x'.repeat(65), '<script>'])('an unsound one (%s) is replaced', async (id) => {
    const answer = await server.api().get('/healthz', { headers: { 'x-request-id': id } })

    expect(answer.headers.get('x-request-id')).toMatch(/^[0-9a-f]{32}$/)
  })

  // W3C Trace Context, level 1, section 3.2: the example of the recommendation.
  test('without one, the trace id of traceparent serves', async () => {
    const answer = await server.api().get('/healthz', { headers: { traceparent: '00-4bf92f3577b34da6a3ce929d0e0e4736-00f067aa0ba902b7-01' } })

    expect(answer.headers.get('x-request-id')).toBe('4bf92f3577b34da6a3ce929d0e0e4736')
  })

  test.each(['00-00000000000000000000000000000000-00f067aa0ba902b7-01', '00-4bf92f3577b34da6a3ce929d0e0e4736-0000000000000000-01', 'ff', '00-XYZ-00f067aa0ba902b7-01'])('an invalid traceparent (%#) is ignored', async (traceparent) => {
    const answer = await server.api().get('/healthz', { headers: { traceparent } })

    expect(answer.headers.get('x-request-id')).toMatch(/^(?!0{32})(?!4bf92f)[0-9a-f]{32}$/)
  })
})

test('requests are limited per caller, in the fields of the IETF draft', async () => {
  const strict = await server.another({ limits: { requestsPerMinute: 3 } })
  const team = await strict.createTeam()
  const [key, other] = [await team.createKey(['read']), await team.createKey(['read'])]

  const answers = []
  for (let i = 0; i < 4; i++) answers.push(await key.get('/v1/session'))

  expect(answers.map(({ status }) => status)).toEqual([200, 200, 200, 429])
  expect(answers[0]!.headers.get('ratelimit-policy')).toMatch(/^"requests"; q=3; w=60/)
  expect(answers[0]!.headers.get('ratelimit')).toMatch(/^"requests"; r=2; t=\d+/)
  expect(answers[3]!.body.type).toBe('tag:heftwise.invalid,2026:rate-limited')
  expect((await other.get('/v1/session')).status).toBe(200)
  await strict.stop()
})

test('a process that has lost the database for more than a second is not ready, and says so', async () => {
  const lost = await server.another()
  const query = lost.database.pool.query.bind(lost.database.pool)
  lost.database.pool.query = (() => new Promise(() => undefined)) as typeof query

  await new Promise((done) => setTimeout(done, 1_300))
  const answer = await lost.api().get('/readyz')
  lost.database.pool.query = query

  expect(answer.status).toBe(503)
  expect(answer.body.type).toBe('tag:heftwise.invalid,2026:not-ready')
  expect((await lost.api().get('/healthz')).status).toBe(200)
  await Promise.race([lost.stop(), new Promise((done) => setTimeout(done, 500))])
})

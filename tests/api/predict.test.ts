import { decode } from 'cborg'
import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import { createKernels, createPrediction, createPredictor } from '../../shared/dynamics/index.ts'
import { limitsOf } from '../../server/services/live-versions.ts'
import { LocalPredictor } from '../../sdk/index.ts'
import { ShapedArray } from '../../server/routes/hot/cbor-reader.ts'
import { writeCbor } from '../../server/routes/hot/cbor-writer.ts'
import { contractDocument } from '../support/api.ts'
import type { Answer, ApiClient } from '../support/api.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer, TestTeam } from '../support/server.ts'
import { serveModel, simulatedMotion, untrainedVersion } from '../support/served-model.ts'
import type { Motion, ServedModel } from '../support/served-model.ts'

const joints = 3
const path = '/v1/models/tinker/predict'

let server: TestServer
let team: TestTeam
let key: ApiClient & { secret: string }
let served: ServedModel

beforeAll(async () => {
  server = await startTestServer()
  team = await server.createTeam()
  key = await team.createKey(['predict'])
  served = await serveModel(server, team.caller(), { joints })
})
afterAll(() => server.stop())

function states({ position, velocity, acceleration }: Motion) {
  return { position, velocity, acceleration }
}

const body = (rows = 2) => ({ joints: served.fingerprint, ...states(simulatedMotion({ joints, rows })) })

/** What the shared core computes for the same states, in the arm's order. */
function computed(motion: Motion, artefact = served.artefact, torqueLimit = 80) {
  const rows = motion.position.length
  const predictor = createPredictor(createKernels(), artefact, limitsOf(Array.from({ length: joints }, () => ({ torqueLimit }))))
  const into = createPrediction(rows, joints)
  const flat = (matrix: number[][]) => Float64Array.from(matrix.flat())
  predictor.predict({ rows, position: flat(motion.position), velocity: flat(motion.velocity), acceleration: flat(motion.acceleration), time: null }, into)
  return into
}

const typeOf = (answer: Answer) => String(answer.body.type).split(':').at(-1)

describe('answers', () => {
  test('torques are those of the shared core, with six significant digits', async () => {
    const motion = simulatedMotion({ joints, rows: 5 })

    const { status, body: answer } = await key.post(path, { joints: served.fingerprint, ...states(motion) })

    expect(status).toBe(200)
    const { torque, coverage } = computed(motion)
    expect(answer.torque.flat()).toEqual(Array.from(torque, (value) => Number(value.toPrecision(6))))
    expect(answer.coverage).toEqual(Array.from(coverage, (value) => Number(value.toPrecision(6))))
    expect(answer).toMatchObject({ model: 'tinker', version: 1, joint_names: served.jointNames, unit: ['N·m', 'N·m', 'N·m'], limited: [] })
  })

  test('joints named in another order get their columns back in that order', async () => {
    const motion = simulatedMotion({ joints, rows: 4 })
    const order = [2, 0, 1]
    const shuffled = (matrix: number[][]) => matrix.map((row) => order.map((joint) => row[joint]))

    const straight = await key.post(path, { joint_names: served.jointNames, ...states(motion) })
    const other = await key.post(path, {
      joint_names: order.map((joint) => served.jointNames[joint]),
      position: shuffled(motion.position), velocity: shuffled(motion.velocity), acceleration: shuffled(motion.acceleration),
    })

    expect(other.body.joint_names).toEqual(['joint-3', 'joint-1', 'joint-2'])
    expect(other.body.torque).toEqual(shuffled(straight.body.torque))
  })

  test('torques beyond the limits are clamped, and limited says where, in the order of the request', async () => {
    const own = await server.createTeam()
    const client = await own.createKey(['predict'])
    const tight = await serveModel(server, own.caller(), { joints, name: 'tight', torqueLimit: 6 })
    const motion = simulatedMotion({ joints, rows: 6 })

    const answer = await client.post('/v1/models/tight/predict', { joint_names: ['joint-3', 'joint-2', 'joint-1'], ...states(motion) })

    const sizes = answer.body.torque.flat().map(Math.abs)
    expect(Math.max(...sizes)).toBe(6)
    expect(answer.body.limited.length).toBeGreaterThan(0)
    for (const [row, joint] of answer.body.limited) expect(Math.abs(answer.body.torque[row][joint])).toBe(6)
    expect(answer.body.limited.length).toBe(sizes.filter((size: number) => size === 6).length)
    expect(tight.fingerprint).toBe(served.fingerprint)
  })

  test('with times, torque changes no faster than the torque-rate limits allow', async () => {
    const own = await server.createTeam()
    const client = await own.createKey(['predict'])
    const slow = await serveModel(server, own.caller(), { joints, name: 'slow', torqueRateLimit: 1 })
    const motion = simulatedMotion({ joints, rows: 10 })

    const answer = await client.post('/v1/models/slow/predict', { joints: slow.fingerprint, time: motion.time, ...states(motion) })

    const torque: number[][] = answer.body.torque
    for (let row = 1; row < torque.length; row++) {
      for (let j = 0; j < joints; j++) expect(Math.abs(torque[row][j] - torque[row - 1][j])).toBeLessThanOrEqual(1 * 0.02 + 2e-4)
    }
    expect(answer.body.limited.length).toBeGreaterThan(0)
  })

  test('a snapshot evaluated locally keeps the torque-rate limits that the service keeps', async () => {
    const own = await server.createTeam()
    const client = await own.createKey(['predict'])
    const slow = await serveModel(server, own.caller(), { joints, name: 'slow', torqueRateLimit: 1 })
    const motion = simulatedMotion({ joints, rows: 10 })
    const flat = (matrix: number[][]) => Float64Array.from(matrix.flat())

    const answer = await client.post('/v1/models/slow/predict', { joints: slow.fingerprint, time: motion.time, ...states(motion) })
    const { body: snapshot } = await client.get('/v1/models/slow/versions/1/snapshot')
    const local = new LocalPredictor(snapshot, { mostRows: 10 }).predict({
      rows: 10, position: flat(motion.position), velocity: flat(motion.velocity), acceleration: flat(motion.acceleration), time: Float64Array.from(motion.time),
    })

    expect(snapshot.torque_rate_limits).toEqual([1, 1, 1])
    expect(Array.from(local.torque, (torque) => Number(torque.toPrecision(6)))).toEqual(answer.body.torque.flat())
    expect(local.limitedCount).toBe(answer.body.limited.length)
  })

  test('a hot answer has no ETag, repeats the request id and states the limit', async () => {
    const answer = await key.post(path, body(), { headers: { 'x-request-id': 'from-the-cell-7', traceparent: '00-4bf92f3577b34da6a3ce929d0e0e4736-00f067aa0ba902b7-01' } })

    expect(answer.headers.get('etag')).toBeNull()
    expect(answer.headers.get('x-request-id')).toBe('from-the-cell-7')
    expect(answer.headers.get('ratelimit-policy')).toMatch(/^"predict"; q=\d+; w=60; pk=:[A-Za-z0-9+/=]+:$/)
    expect(answer.headers.get('ratelimit')).toMatch(/^"predict"; r=\d+; t=\d+$/)
  })

  test('without an id of its own a request is known by its trace', async () => {
    const answer = await key.post(path, body(), { headers: { traceparent: '00-4bf92f3577b34da6a3ce929d0e0e4736-00f067aa0ba902b7-01' } })

    expect(answer.headers.get('x-request-id')).toBe('4bf92f3577b34da6a3ce929d0e0e4736')
  })

  test('4096 rows are answered', async () => {
    const answer = await key.post(path, body(4096))

    expect(answer.status).toBe(200)
    expect(answer.body.torque).toHaveLength(4096)
  })
})

describe('versions', () => {
  test('the next predict after a release uses the released version, in the process that answered and within a second in another', async () => {
    const own = await server.createTeam()
    const client = await own.createKey(['predict'])
    const model = await serveModel(server, own.caller(), { joints, name: 'moving' })
    const other = await server.another()
    const elsewhere = other.api(client.secret)
    const ask = { joints: model.fingerprint, ...states(simulatedMotion({ joints, rows: 1 })) }
    expect((await elsewhere.post('/v1/models/moving/predict', ask)).body.version).toBe(1)

    const second = await model.addVersion(untrainedVersion({ joints, seed: 9 }))
    await model.release(second)

    expect((await client.post('/v1/models/moving/predict', ask)).body.version).toBe(2)
    expect((await client.post('/v1/models/moving/predict', { ...ask, version: 1 })).body.version).toBe(1)
    await expect.poll(async () => (await elsewhere.post('/v1/models/moving/predict', ask)).body.version, { timeout: 1000 }).toBe(2)
    await other.stop()
  })

  test('a version, model or team that is not there is not found', async () => {
    const stranger = await (await server.createTeam()).createKey(['predict'])

    expect((await key.post(path, { ...body(), version: 99 })).status).toBe(404)
    expect((await key.post('/v1/models/none/predict', body())).status).toBe(404)
    expect((await key.post('/v1/models/No%20Name/predict', body())).status).toBe(404)
    expect((await stranger.post(path, body())).status).toBe(404)
  })
})

describe('who may', () => {
  test('credentials that are missing, wrong or too narrow are refused as RFC 6750 says', async () => {
    const none = await server.api().post(path, body())
    const wrong = await server.api('hw_nonsense').post(path, body())
    const narrow = await (await team.createKey(['read'])).post(path, body())

    expect([none.status, wrong.status, narrow.status]).toEqual([401, 401, 403])
    expect(none.headers.get('www-authenticate')).not.toContain('error=')
    expect(wrong.headers.get('www-authenticate')).toContain('error="invalid_token"')
    expect(narrow.headers.get('www-authenticate')).toContain('error="insufficient_scope"')
  })

  test('an engineer may from the console, an operator may not', async () => {
    const engineer = await team.signIn('engineer')
    const operator = await team.signIn('operator')

    expect((await engineer.post(path, body())).status).toBe(200)
    expect((await engineer.post(path, body(), { headers: { 'x-csrf-token': 'wrong' } })).status).toBe(403)
    expect((await operator.post(path, body())).status).toBe(403)
  })

  test('a key that asks more often than the limit allows is told when to come back', async () => {
    const strict = await server.another({ limits: { hotRequestsPerMinute: 2 } })
    const client = strict.api(key.secret)

    const answers = [await client.post(path, body()), await client.post(path, body()), await client.post(path, body())]

    expect(answers.map(({ status }) => status)).toEqual([200, 200, 429])
    expect(Number(answers[2].headers.get('retry-after'))).toBeGreaterThan(0)
    await strict.stop()
  })
})

describe('CBOR', () => {
  const shaped = (matrix: number[][]) => new ShapedArray([matrix.length, joints], Float32Array.from(matrix.flat()))
  const post = (content: unknown, headers: Record<string, string> = {}) =>
    key.post(path, writeCbor(content), { headers: { 'content-type': 'application/cbor', ...headers } })

  /** Reads an answer with the general-purpose library, typed arrays as plain ones. */
  function read(answer: Answer): any {
    const tags: any[] = []
    tags[40] = (item: any) => {
      const [[rows, columns], values] = item()
      return Array.from({ length: rows }, (_, row) => values.slice(row * columns, (row + 1) * columns))
    }
    tags[85] = (item: any) => Array.from(new Float32Array(Uint8Array.from(item()).buffer))
    return decode(answer.body, { tags })
  }

  test('typed arrays in and out give the binary32 of the torques that JSON rounds', async () => {
    const motion = simulatedMotion({ joints, rows: 7 })
    for (const matrix of [motion.position, motion.velocity, motion.acceleration]) for (const row of matrix) row.forEach((value, k) => (row[k] = Math.fround(value)))

    const answer = await post({ joints: served.fingerprint, position: shaped(motion.position), velocity: shaped(motion.velocity), acceleration: shaped(motion.acceleration) })

    expect(answer.headers.get('content-type')).toBe('application/cbor')
    expect(read(answer).torque.flat()).toEqual(Array.from(computed(motion).torque, Math.fround))
    const json = await key.post(path, { joints: served.fingerprint, ...states(motion) })
    expect(read(answer)).toMatchObject({ version: 1, joint_names: json.body.joint_names, unit: json.body.unit, limited: [] })
  })

  test('a matrix may be an array of plain rows, an array of typed rows, or a typed array with dimensions', async () => {
    const { position, velocity, acceleration } = simulatedMotion({ joints, rows: 3 })
    const typedRows = (matrix: number[][]) => matrix.map((row) => Float32Array.from(row))

    const answers = [
      await post({ joints: served.fingerprint, position, velocity, acceleration }),
      await post({ joints: served.fingerprint, position: typedRows(position), velocity: typedRows(velocity), acceleration: typedRows(acceleration) }),
      await post({ joints: served.fingerprint, position: shaped(position), velocity: shaped(velocity), acceleration: shaped(acceleration) }),
    ]

    expect(answers.map(({ status }) => status)).toEqual([200, 200, 200])
    const torques = answers.map((answer) => read(answer).torque.flat())
    expect(torques[1]).toEqual(torques[2])
    torques[0].forEach((value: number, k: number) => expect(value).toBeCloseTo(torques[1][k], 4))
  })

  test('Accept chooses the answer; where it does not, the answer is in the form of the request', async () => {
    const cbor = { joints: served.fingerprint, ...states(simulatedMotion({ joints, rows: 1 })) }

    expect((await post(cbor, { accept: 'application/json' })).headers.get('content-type')).toBe('application/json')
    expect((await key.post(path, body(), { headers: { accept: 'application/cbor' } })).headers.get('content-type')).toBe('application/cbor')
    expect((await post(cbor, { accept: '*/*' })).headers.get('content-type')).toBe('application/cbor')
    expect((await key.post(path, body(), { headers: { accept: 'text/html' } })).status).toBe(406)
  })

  test.each([
    ['NaN in a typed array', () => ({ joints: served.fingerprint, position: shaped([[1, NaN, 0]]), velocity: shaped([[0, 0, 0]]), acceleration: shaped([[0, 0, 0]]) }), '/position/0/1'],
    ['other dimensions', () => ({ joints: served.fingerprint, position: shaped([[1, 2, 3]]), velocity: new ShapedArray([3, 1], Float32Array.of(1, 2, 3)), acceleration: shaped([[0, 0, 0]]) }), '/velocity'],
    ['a flat typed array', () => ({ joints: served.fingerprint, position: Float32Array.of(1, 2, 3), velocity: shaped([[0, 0, 0]]), acceleration: shaped([[0, 0, 0]]) }), '/position'],
  ])('%s is refused where it is', async (_what, content, pointer) => {
    const answer = await post(content())

    expect(answer.status).toBe(422)
    expect(answer.body.errors[0].pointer).toBe(pointer)
  })

  test('bytes that are no CBOR are a malformed body', async () => {
    const answer = await key.post(path, Buffer.from('a1616', 'hex'), { headers: { 'content-type': 'application/cbor' } })

    expect([answer.status, typeOf(answer)]).toEqual([400, 'malformed-body'])
  })
})

describe('refusals', () => {
  const row = [0.1, 0.2, 0.3]
  const good = { position: [row, row], velocity: [row, row], acceleration: [row, row] }
  const withJoints = (more: object) => ({ joint_names: ['joint-1', 'joint-2', 'joint-3'], ...good, ...more })
  const bad: [string, object, string, string?][] = [
    ['neither joints nor joint_names', good, ''],
    ['both of them', withJoints({ joints: '000000000000' }), '/joints'],
    ['an unknown joint', withJoints({ joint_names: ['joint-1', 'joint-2', 'elbow'] }), '/joint_names/2', 'wrong-joints'],
    ['a missing joint', withJoints({ joint_names: ['joint-1', 'joint-2'] }), '/joint_names', 'wrong-joints'],
    ['a doubled joint', withJoints({ joint_names: ['joint-1', 'joint-2', 'joint-2'] }), '/joint_names/2', 'wrong-joints'],
    ['names that are no texts', withJoints({ joint_names: [1, 2, 3] }), '/joint_names/0'],
    ['names that are no array', withJoints({ joint_names: 'joint-1' }), '/joint_names'],
    ["another arm's fingerprint", { ...good, joints: '0123456789ab' }, '/joints', 'wrong-joints'],
    ['a fingerprint of another form', { ...good, joints: 'ABC' }, '/joints'],
    ['null for a number', withJoints({ velocity: [row, [0, null, 0]] }), '/velocity/1/1'],
    ['a text for a number', withJoints({ velocity: [row, [0, 0, 'NaN']] }), '/velocity/1/2'],
    ['a number as a text', withJoints({ velocity: [row, [0, 0, '0.5']] }), '/velocity/1/2'],
    ['a boolean for a number', withJoints({ velocity: [[true, 0, 0], row] }), '/velocity/0/0'],
    ['null for a matrix', withJoints({ acceleration: null }), '/acceleration'],
    ['null for a row', withJoints({ acceleration: [null, row] }), '/acceleration/0'],
    ['no matrix', { joint_names: ['joint-1', 'joint-2', 'joint-3'], position: [row], velocity: [row] }, '/acceleration'],
    ['no rows', withJoints({ position: [], velocity: [], acceleration: [] }), '/position'],
    ['a short row', withJoints({ position: [row, [1, 2]] }), '/position/1'],
    ['a long row', withJoints({ position: [row, [1, 2, 3, 4]] }), '/position/1'],
    ['fewer rows in one matrix', withJoints({ velocity: [row] }), '/velocity'],
    ['a flat matrix', withJoints({ position: row, velocity: row, acceleration: row }), '/position/0'],
    ['rows nested once more', withJoints({ position: [[row], [row]] }), '/position/0'],
    ['an object for a row', withJoints({ position: [{ 0: 1 }, row] }), '/position/0'],
    ['a magnitude beyond any arm', withJoints({ position: [row, [1e30, 0, 0]] }), '/position/1/0'],
    ['an unknown field', withJoints({ positions: [row] }), '/positions'],
    ['a version that is a text', withJoints({ version: '1' }), '/version'],
    ['version 0', withJoints({ version: 0 }), '/version'],
    ['a broken version', withJoints({ version: 1.5 }), '/version'],
    ['times that do not rise', withJoints({ time: [1, 1] }), '/time/1', 'time-not-rising'],
    ['too few times', withJoints({ time: [1] }), '/time'],
    ['a time that is null', withJoints({ time: [1, null] }), '/time/1'],
    ['a field named __proto__', JSON.parse(`${JSON.stringify(withJoints({})).slice(0, -1)},"__proto__":{"version":1}}`), '/__proto__'],
  ]

  test.each(bad)('%s: refused, and the answer says where', async (_what, content, pointer, type = 'invalid-request') => {
    const answer = await key.post(path, JSON.stringify(content), { headers: { 'content-type': 'application/json' } })

    expect([answer.status, typeOf(answer)]).toEqual([422, type])
    expect(answer.body.errors[0].pointer).toBe(pointer)
    expect(answer.body.detail.length).toBeGreaterThan(20)
  })

  test('a row and a joint at fault are named', async () => {
    const answer = await key.post(path, withJoints({ velocity: [row, [0, null, 0]] }))

    expect(answer.body.errors[0]).toMatchObject({ row: 1, joint: 'joint-2' })
    expect(answer.body.detail).toMatch(/velocity: row 1, joint "joint-2" is null/)
  })

  test.each([
    ['NaN', '{"position":[[NaN]]}'], ['a body cut short', '{"position":[[1,2'], ['nothing', ''], ['nesting without end', '['.repeat(1_000_000)],
    ['bytes that are no UTF-8', Buffer.from([0x7b, 0xff, 0x7d])],
  ])('%s is a malformed body', async (_what, content) => {
    const answer = await key.post(path, content, { headers: { 'content-type': 'application/json' } })

    expect([answer.status, typeOf(answer)]).toEqual([400, 'malformed-body'])
  })

  test.each([['an array', '[]'], ['null', 'null'], ['a number', '7'], ['deep but sound nesting', `${'['.repeat(100_000)}${']'.repeat(100_000)}`], ['a text', '"x"']])(
    '%s as body is refused', async (_what, content) => {
      expect((await key.post(path, content, { headers: { 'content-type': 'application/json' } })).status).toBe(422)
    },
  )

  test('deep nesting inside a matrix is refused', async () => {
    const deep = `${'['.repeat(200_000)}${']'.repeat(200_000)}`
    const answer = await key.post(path, `{"joints":"${served.fingerprint}","position":${deep},"velocity":[[0,0,0]],"acceleration":[[0,0,0]]}`, { headers: { 'content-type': 'application/json' } })

    expect(answer.status).toBe(422)
  })

  test('too many rows, 4 MiB and 100 MB are too large, and the server goes on', async () => {
    const rows = await key.post(path, body(4097))
    const big = await key.post(path, Buffer.alloc((4 << 20) + 1, 32), { headers: { 'content-type': 'application/json' } })
    const huge = await key.post(path, Buffer.alloc(100_000_000, 32), { headers: { 'content-type': 'application/json' } })

    expect([rows, big, huge].map((answer) => [answer.status, typeOf(answer)])).toEqual(Array.from({ length: 3 }, () => [413, 'body-too-large']))
    expect((await key.post(path, body())).status).toBe(200)
  })

  test('other media types and packed bodies are not understood', async () => {
    expect((await key.post(path, 'x', { headers: { 'content-type': 'text/plain' } })).status).toBe(415)
    expect((await key.post(path, JSON.stringify(body()), { headers: { 'content-type': 'application/json', 'content-encoding': 'gzip' } })).status).toBe(415)
  })

  test('what the contract refuses is refused, and what it takes for this arm is taken', async () => {
    const check = contractDocument().bodyCheck('predict', 'application/json')
    // Joints that are none of this arm, rows that do not belong together and times that do not rise are beyond a schema.
    const beyondSchema = new Set(['wrong-joints', 'time-not-rising'])
    const semantic = new Set(['fewer rows in one matrix', 'a short row', 'a long row', 'too few times', 'a magnitude beyond any arm'])
    for (const [what, content, , type = 'invalid-request'] of bad) {
      if (beyondSchema.has(type) || semantic.has(what)) continue
      expect(check(structuredClone(content)).length, what).toBeGreaterThan(0)
    }
    for (const content of [withJoints({}), withJoints({ version: 1 }), withJoints({ time: [0, 1] }), { ...good, joints: served.fingerprint }]) {
      expect(check(structuredClone(content))).toEqual([])
      expect((await key.post(path, content)).status).toBe(200)
    }
  })
})

test('a matrix of a million short rows is refused without keeping anybody waiting', async () => {
  const rows = 900_000
  const sound = body(1)
  const text = JSON.stringify({ ...sound, velocity: [[0]] }).replace('[[0]]', `[${'[0],'.repeat(rows - 1)}[0]]`)

  const startedAt = performance.now()
  const answer = await key.post(path, text, { headers: { 'content-type': 'application/json' } })

  expect(answer.status).toBe(422)
  expect(answer.body.detail).toContain(`velocity has ${rows} rows, the request has 1.`)
  expect(performance.now() - startedAt).toBeLessThan(3_000)
})

test('a key in the query is not read, whatever the header says', async () => {
  const answer = await server.api().post(`${path}?access_token=${key.secret}`, body(), { headers: { authorization: 'Basic YTpi' } })

  expect([answer.status, typeOf(answer)]).toEqual([401, 'unauthenticated'])
})

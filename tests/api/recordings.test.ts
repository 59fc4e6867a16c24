import { createHash } from 'node:crypto'
import { request } from 'node:http'
import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import { csvOf, twoJointArm, twoJointCsv, twoJointHeader, twoJointRows } from '../support/recording-csv.ts'
import { startTestServer, type TestServer } from '../support/server.ts'

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

async function teamWithArm() {
  const team = await server.createTeam()
  const key = await team.createKey(['build', 'read'])
  await key.post('/v1/arms', twoJointArm())
  return { team, key }
}

function form(csv: string | Uint8Array, fields: Record<string, string> = {}, fileName = 'reach-01.csv'): FormData {
  const data = new FormData()
  for (const [name, value] of Object.entries({ arm: 'tinker-2', use: 'fit', ...fields })) data.set(name, value)
  data.set('file', new Blob([csv as BlobPart], { type: 'text/csv' }), fileName)
  return data
}

/** Nothing of any upload is left besides whole recordings. */
async function expectNothingHalfStored() {
  const chunks = await server.database.pool.query(
    'SELECT recording_id FROM recording_chunks WHERE recording_id NOT IN (SELECT id FROM recordings)',
  )
  const uploads = await server.database.pool.query('SELECT recording_id FROM recording_uploads')
  expect([...chunks, ...uploads]).toEqual([])
}

test('a recording is stored with its context, and every number can be read back', async () => {
  const { team, key } = await teamWithArm()
  const rows = twoJointRows({ rows: 200, payload: 1.2 })
  const csv = csvOf(twoJointHeader, rows)
  const context = { motion: 'pick', robot: 'bench 1', payload: { mass: 1.2, center_of_mass: [0, 0.01, 0.08] } }

  const stored = await key.post('/v1/recordings', form(csv, { use: 'meta_train', context: JSON.stringify(context) }))

  expect(stored.status).toBe(201)
  expect(stored.headers.get('location')).toBe(`/v1/recordings/${stored.body.id}`)
  expect(stored.body).toMatchObject({
    arm: 'tinker-2',
    name: 'reach-01.csv',
    use: 'meta_train',
    context,
    rows: 200,
    duration: 3.98,
    rate: 50,
    bytes: csv.length,
    checksum: createHash('sha256').update(csv).digest('hex'),
  })
  expect((await key.get(`/v1/recordings/${stored.body.id}`)).body).toEqual(stored.body)
  const motion = await server.services.recordings.motion(team.id, stored.body.id)
  expect(motion.torque.at(-1)).toBe(Number(rows.at(-1)![8].toPrecision(8)))
  expect(motion.states[7]).toBe(Number(rows[1][2].toPrecision(8)))
})

test('the same content for the same arm again answers 200 with what is there', async () => {
  const { key } = await teamWithArm()
  await key.post('/v1/arms', twoJointArm('other-2'))
  const first = await key.post('/v1/recordings', form(twoJointCsv()))

  const again = await key.post('/v1/recordings', form(twoJointCsv(), { use: 'evaluate' }, 'renamed.csv'))
  const elsewhere = await key.post('/v1/recordings', form(twoJointCsv(), { arm: 'other-2' }))

  expect([first.status, again.status, elsewhere.status]).toEqual([201, 200, 201])
  expect(again.body).toEqual(first.body)
  await expectNothingHalfStored()
})

test('the same content uploaded several times at once is stored once', async () => {
  const { key } = await teamWithArm()

  const answers = await Promise.all(Array.from({ length: 4 }, () => key.post('/v1/recordings', form(twoJointCsv({ seed: 5 })))))

  expect(answers.map(({ status }) => status).sort()).toEqual([200, 200, 200, 201])
  expect(new Set(answers.map(({ body }) => body.id)).size).toBe(1)
  await expectNothingHalfStored()
})

describe('an upload is refused', () => {
  const csv = twoJointCsv()
  test.each([
    [
      'with NaN in a row',
      form(csv.replace(/\n([^\n]*),([^,\n]*)\n$/, '\n$1,NaN\n')),
      422,
      'recording-unreadable',
      /line 401, column torque_lift \(joint lift\) is "NaN"/,
    ],
    ['that is no CSV', form(new Uint8Array(3000).fill(7)), 422, 'recording-unreadable', /./],
    ['for an arm that is not there', form(csv, { arm: 'nobody' }), 404, 'not-found', /nobody/],
    ['with an unknown use', form(csv, { use: 'fun' }), 422, 'invalid-request', /use: Found "fun"/],
    ['with a field nobody knows', form(csv, { colour: 'red' }), 422, 'invalid-request', /"colour" is not known/],
    ['with a context that is not JSON', form(csv, { context: '{' }), 422, 'invalid-request', /context is not JSON/],
    ['with a context of other fields', form(csv, { context: '{"weather":"fine"}' }), 422, 'invalid-request', /context\.weather/],
    ['with a payload without mass', form(csv, { context: '{"payload":{}}' }), 422, 'invalid-request', /context\.payload\.mass/],
  ])('%s', async (_, body, status, slug, detail) => {
    const { key } = await teamWithArm()

    const refused = await key.post('/v1/recordings', body)

    expect(refused.status).toBe(status)
    expect(refused.body.type).toBe(`tag:heftwise.invalid,2026:${slug}`)
    expect(refused.body.detail).toMatch(detail)
    await expectNothingHalfStored()
  })

  test('with the file before the fields', async () => {
    const { key } = await teamWithArm()
    const data = new FormData()
    data.set('file', new Blob([csv]), 'a.csv')
    data.set('arm', 'tinker-2')
    data.set('use', 'fit')

    const refused = await key.post('/v1/recordings', data)

    expect(refused.status).toBe(422)
    expect(refused.body.errors.map((fault: { pointer: string }) => fault.pointer)).toContain('/arm')
  })

  test('with a field after the file, which could have meant something', async () => {
    const { key } = await teamWithArm()
    const data = form(csv)
    data.set('context', '{"payload":{"mass":2}}')

    const refused = await key.post('/v1/recordings', data)

    expect(refused.body.detail).toMatch(/"context" comes after the file/)
    await expectNothingHalfStored()
  })

  test('without a file', async () => {
    const { key } = await teamWithArm()
    const data = new FormData()
    data.set('arm', 'tinker-2')
    data.set('use', 'fit')

    expect((await key.post('/v1/recordings', data)).body.detail).toMatch(/no file/)
  })

  test('that is no form', async () => {
    const { key } = await teamWithArm()

    expect((await key.post('/v1/recordings', { arm: 'tinker-2' })).status).toBe(415)
    expect(
      (await key.send('POST', '/v1/recordings', { body: 'x', headers: { 'content-type': 'multipart/form-data' } })).status,
    ).toBe(400)
  })

  test('by a key without the scope', async () => {
    const { team } = await teamWithArm()
    const reader = await team.createKey(['read'])

    expect((await reader.post('/v1/recordings', form(csv))).status).toBe(403)
  })
})

/** Sends a form's beginning, then as much of a CSV as `rows` gives, then what `end` does. */
async function stream(
  secret: string,
  rows: () => Generator<string>,
  end: 'whole' | 'break' | 'cut',
): Promise<{ status?: number; body: any }> {
  const boundary = 'a-boundary'
  const field = (name: string, value: string) =>
    `--${boundary}\r\ncontent-disposition: form-data; name="${name}"\r\n\r\n${value}\r\n`
  const head = `${field('arm', 'tinker-2')}${field('use', 'fit')}--${boundary}\r\ncontent-disposition: form-data; name="file"; filename="long.csv"\r\n\r\n`
  return new Promise((resolve) => {
    const req = request(`${server.origin}/v1/recordings`, {
      method: 'POST',
      headers: { authorization: `Bearer ${secret}`, 'content-type': `multipart/form-data; boundary=${boundary}` },
    })
    req.on('response', (res) => {
      let text = ''
      res.on('data', (piece) => (text += piece)).on('end', () => resolve({ status: res.statusCode, body: JSON.parse(text) }))
    })
    req.on('error', (error) => resolve({ body: String(error) }))
    void (async () => {
      req.write(head)
      for (const piece of rows()) if (!req.write(piece)) await new Promise<void>((drained) => req.once('drain', drained))
      if (end === 'whole') req.end(`\r\n--${boundary}--\r\n`)
      else if (end === 'cut') req.end()
      else req.destroy()
    })()
  })
}

function* longCsv(bytes: number, seed = 1): Generator<string> {
  const rows = twoJointRows({ rows: 1000, seed }).map((row) =>
    row
      .slice(1)
      .map((value) => value.toFixed(15))
      .join(','),
  )
  yield `${twoJointHeader.join(',')}\n`
  let written = 0
  for (let row = 0; written < bytes;) {
    let piece = ''
    for (let k = 0; k < 500; k++, row++) piece += `${(row / 50).toFixed(2)},${rows[row % rows.length]}\n`
    written += piece.length
    yield piece
  }
}

test('a sender that reads nothing until its last byte is sent gets its refusal all the same', async () => {
  const { key } = await teamWithArm()
  const file = Buffer.alloc(20_000_000, '0,')
  const field = (name: string, value: string) => `--edge\r\ncontent-disposition: form-data; name="${name}"\r\n\r\n${value}\r\n`
  const head = `${field('arm', 'no-such-arm')}${field('use', 'fit')}--edge\r\ncontent-disposition: form-data; name="file"; filename="a.csv"\r\n\r\n`
  const whole = Buffer.concat([Buffer.from(head), file, Buffer.from('\r\n--edge--\r\n')])

  const asked = request(`${server.origin}/v1/recordings`, {
    method: 'POST',
    headers: { authorization: `Bearer ${key.secret}`, 'content-type': 'multipart/form-data; boundary=edge', 'content-length': whole.length },
  })
  const answered = new Promise<number | undefined>((done, fail) => asked.on('response', (res) => done(res.resume().statusCode)).on('error', fail))
  const sent = new Promise<void>((done) => asked.on('finish', done))
  asked.end(whole)
  await sent

  expect(await answered).toBe(404)
}, 10_000)

test('an upload that breaks off leaves nothing behind', async () => {
  const { key } = await teamWithArm()
  const before = (await key.get('/v1/recordings')).body.items

  await stream(key.secret, () => longCsv(6_000_000), 'break')
  const cut = await stream(key.secret, () => longCsv(3_000_000), 'cut')

  expect(cut.status).toBe(400)
  expect(cut.body.type).toBe('tag:heftwise.invalid,2026:upload-incomplete')
  expect((await key.get('/v1/recordings')).body.items).toEqual(before)
  await expect
    .poll(
      () =>
        expectNothingHalfStored().then(
          () => 'clean',
          () => 'dirty',
        ),
      { timeout: 5_000 },
    )
    .toBe('clean')
})

test('30 MB are streamed with flat memory while the server answers others', async () => {
  const { key } = await teamWithArm()
  await stream(key.secret, () => longCsv(2_000_000), 'whole')
  globalThis.gc?.()
  const before = process.memoryUsage().rss
  let peak = before
  let slowest = 0
  const watch = setInterval(() => (peak = Math.max(peak, process.memoryUsage().rss)), 20)
  let uploading = true
  const asking = (async () => {
    while (uploading) {
      const at = performance.now()
      await fetch(`${server.origin}/healthz`)
      slowest = Math.max(slowest, performance.now() - at)
      await new Promise((done) => setTimeout(done, 20))
    }
  })()

  const stored = await stream(key.secret, () => longCsv(30_000_000, 2), 'whole')
  uploading = false
  await asking
  clearInterval(watch)

  expect(stored.status).toBe(201)
  expect(stored.body.bytes).toBeGreaterThan(30_000_000)
  // Sender, server, parsing thread and its heap are in this one process; the file held in memory once would already be 30 MB.
  expect(peak - before).toBeLessThan(120e6)
  expect(slowest).toBeLessThan(1_000)
  console.info(`30 MB: memory rose by ${Math.round((peak - before) / 1e6)} MB, slowest other answer ${Math.round(slowest)} ms`)
}, 120_000)

test('recordings are listed newest first, by arm and use, page after page', async () => {
  const { key } = await teamWithArm()
  for (const seed of [1, 2, 3])
    await key.post('/v1/recordings', form(twoJointCsv({ seed }), { use: seed === 3 ? 'validate' : 'fit' }, `m-${seed}.csv`))

  const first = await key.get('/v1/recordings?limit=2')
  const second = await key.get(`/v1/recordings?limit=2&cursor=${first.body.next_cursor}`)

  const names = (page: typeof first) => page.body.items.map((item: { name: string }) => item.name)
  expect([names(first), names(second)]).toEqual([['m-3.csv', 'm-2.csv'], ['m-1.csv']])
  expect(names(await key.get('/v1/recordings?use=validate'))).toEqual(['m-3.csv'])
  expect(names(await key.get('/v1/recordings?arm=none-such'))).toEqual([])
})

test('a deleted recording is gone with its rows, and its content can be uploaded anew', async () => {
  const { key } = await teamWithArm()
  const { body } = await key.post('/v1/recordings', form(twoJointCsv()))

  const deleted = await key.delete(`/v1/recordings/${body.id}?reason=Wrong+payload+noted.`)

  expect(deleted.status).toBe(204)
  expect((await key.get(`/v1/recordings/${body.id}`)).status).toBe(404)
  await expectNothingHalfStored()
  expect((await key.post('/v1/recordings', form(twoJointCsv()))).status).toBe(201)
})

test("another team's recording is not there", async () => {
  const { key } = await teamWithArm()
  const { body } = await key.post('/v1/recordings', form(twoJointCsv()))
  const { key: other } = await teamWithArm()

  expect((await other.get(`/v1/recordings/${body.id}`)).status).toBe(404)
  expect((await other.delete(`/v1/recordings/${body.id}?reason=not+mine`)).status).toBe(404)
  expect((await other.get('/v1/recordings')).body.items).toEqual([])
})

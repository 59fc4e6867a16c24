import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import { problemKinds, slugOfType } from '../../shared/contract/problems.ts'
import { client, contractDocument } from '../support/api.ts'
import type { Answer, ApiClient } from '../support/api.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer, TestTeam } from '../support/server.ts'

let server: TestServer
let team: TestTeam
let key: ApiClient & { secret: string }
beforeAll(async () => {
  server = await startTestServer()
  team = await server.createTeam()
  key = await team.createKey(['build', 'read'])
})
afterAll(() => server.stop())

/** RFC 9457, sections 3 and 4: the media type, and members of their types. */
function expectProblem(answer: Answer, slug: string): void {
  expect(answer.headers.get('content-type')).toBe('application/problem+json')
  const { type, title, status, detail } = answer.body
  expect(slugOfType(type), JSON.stringify(answer.body)).toBe(slug)
  expect(URL.canParse(type)).toBe(true)
  expect(title).toBe(problemKinds.find((kind) => kind.type === type)!.title)
  expect(status).toBe(answer.status)
  expect(detail.length).toBeGreaterThan(15)
  expect(answer.body.request_id).toBe(answer.headers.get('x-request-id'))
}

test('the table of problems and the contract list the same types', () => {
  const { components } = contractDocument().document as { components: { schemas: { ProblemType: { enum: string[] } } } }

  expect(problemKinds.map(({ type }) => type).sort()).toEqual([...components.schemas.ProblemType.enum].sort())
})

test.each(['constructor', '__proto__', 'toString'])('"%s" is no type of ours', (slug) => {
  expect(slugOfType(`tag:heftwise.invalid,2026:${slug}`)).toBeUndefined()
})

test('every type has a title of its own and a status of the 4xx or 5xx', () => {
  expect(new Set(problemKinds.map(({ title }) => title)).size).toBe(problemKinds.length)
  for (const { status } of problemKinds) expect(status).toBeGreaterThanOrEqual(400)
})

describe('bearer tokens', () => {
  const asking = (authorization: string, path = '/v1/session') => client(server.origin, { authorization }).get(path)

  // RFC 6750, section 3: without credentials the challenge carries no error information.
  test('none at all: a bare challenge', async () => {
    const answer = await server.api().get('/v1/session')

    expectProblem(answer, 'unauthenticated')
    expect(answer.headers.get('www-authenticate')).toBe('Bearer realm="heftwise"')
  })

  // RFC 6750, section 3.1: invalid_token, 401.
  test.each(['x', 'a'.repeat(43), 'a'.repeat(4000), '-'])('an unknown one (%#): invalid_token', async (token) => {
    const answer = await asking(`Bearer ${token}`)

    expectProblem(answer, 'invalid-token')
    expect(answer.headers.get('www-authenticate')).toMatch(/^Bearer realm="heftwise", error="invalid_token"/)
  })

  // RFC 6750, section 3.1: invalid_request, 400, for a request that is malformed.
  test.each(['Bearer', 'Bearer one two', 'Bearer ', 'onlyonething'])('malformed as "%s": invalid_request, or a bare challenge', async (authorization) => {
    const answer = await asking(authorization)

    expect([400, 401]).toContain(answer.status)
    if (answer.status === 400) expect(answer.headers.get('www-authenticate')).toMatch(/error="invalid_request"/)
    else expect(answer.headers.get('www-authenticate')).toMatch(/^Bearer realm="heftwise"/)
  })

  test('another scheme: a bare challenge', async () => {
    const answer = await asking(`Basic ${Buffer.from('a:b').toString('base64')}`)

    expectProblem(answer, 'unauthenticated')
  })

  test('in the query beside the header: refused', async () => {
    const answer = await asking(`Bearer ${key.secret}`, `/v1/session?access_token=${key.secret}`)

    expect(answer.status).toBe(400)
    expect(answer.headers.get('www-authenticate')).toMatch(/error="invalid_request"/)
    expect(JSON.stringify(answer.body)).not.toContain(key.secret)
  })

  test('in the query alone: no credentials', async () => {
    const answer = await server.api().get(`/v1/session?access_token=${key.secret}`)

    expectProblem(answer, 'unauthenticated')
  })

  test('the scheme’s name is taken in any case', async () => {
    expect((await asking(`bearer ${key.secret}`)).status).toBe(200)
  })
})

describe('paths and methods', () => {
  test('an unknown path under /v1 is not found, as JSON', async () => {
    expectProblem(await key.get('/v1/unknown'), 'not-found')
  })

  test('a known path with a wrong method says which it takes', async () => {
    const answer = await key.send('PUT', '/v1/arms')

    expectProblem(answer, 'method-not-allowed')
    // RFC 9110, section 15.5.6.
    expect(answer.headers.get('allow')).toBe('GET, POST')
  })

  test.each(['/v1/arms/%E0%A4%A', '/v1/arms/%00', '/v1/arms/Not%20A%20Name', `/v1/arms/${'a'.repeat(3000)}`, '/v1/recordings/not-an-id', '/v1/models/x/versions/zero'])(
    'a path that can name nothing (%#) is not found', async (path) => {
      expectProblem(await key.get(path), 'not-found')
    })

  test.each(['/v1/arms?colour=red', '/v1/arms?limit=1.5', '/v1/arms?archived=perhaps', '/v1/arms?limit[]=3', '/v1/arms?__proto__=1'])('%s is refused', async (path) => {
    expectProblem(await key.get(path), 'invalid-request')
  })

  test('an Accept that cannot be met is told what there is', async () => {
    const answer = await key.get('/v1/arms', { headers: { accept: 'text/csv' } })

    expectProblem(answer, 'not-acceptable')
    expect(answer.body.detail).toContain('application/json')
  })
})

/** Every operation that takes JSON, asked by somebody who may, with bodies that no honest client sends. */
describe('nasty bodies', () => {
  const deep = (levels: number) => '['.repeat(levels) + ']'.repeat(levels)
  const nasty: [string, string | Uint8Array, number[]][] = [
    ['nothing', '', [400]],
    ['not JSON', '{"name": ', [400]],
    ['NaN', '{"name": NaN}', [400]],
    ['-Infinity', '{"name": -Infinity}', [400]],
    ['bytes that are no UTF-8', new Uint8Array([123, 34, 0xff, 0xfe, 34, 58, 49, 125]), [400]],
    ['a hundred thousand brackets', deep(100_000), [400]],
    ['deep nesting inside a field', `{"reason": ${deep(60)}, "name": ${deep(60)}}`, [422]],
    ['null', 'null', [422]],
    ['a number', '7', [422]],
    ['a list', '[]', [422]],
    ['a string', '"abc"', [422]],
    ['numbers that overflow', '{"name": 1e999, "reason": -1e999}', [422]],
    ['nulls', '{"name": null, "reason": null, "version": null, "kind": null, "scopes": null, "joints": null, "format": null}', [422]],
    ['wrong types', '{"name": {}, "reason": [], "version": "1", "kind": 5, "scopes": {"0": "read"}, "joints": "all", "model": [[]], "overlap_seconds": "x"}', [422]],
    ['a prototype', '{"__proto__": {"admin": true}, "constructor": {"prototype": {}}}', [422]],
    ['fields nobody knows', '{"frobnicate": true}', [422]],
  ]
  const takesJson = contractDocument().operations.filter(({ bodyTypes, id }) => bodyTypes.includes('application/json') && id !== 'signIn')

  function concrete(path: string): string {
    return path.replaceAll(/\{(model|arm|loss)\}/g, 'not-there').replaceAll(/\{(version|position)\}/g, '1').replaceAll(/\{\w+\}/g, '0193a5c2-7d1e-7cc0-a1b2-3c4d5e6f7081')
  }

  let caller: (takesKey: boolean) => ApiClient
  beforeAll(async () => {
    const all = await team.createKey(['predict', 'adapt', 'read', 'build', 'release'])
    const administrator = await team.signIn('administrator')
    caller = (takesKey) => (takesKey ? all : administrator)
  })

  test.each(takesJson.map((operation) => [operation.id, operation] as const))('%s answers each with a problem, never a mistake of its own', async (id, operation) => {
    const isForPeople = !operation.takesKey || ['manage_keys', 'resume'].includes(operation.action)
    for (const [what, body, expected] of nasty) {
      const answer = await caller(!isForPeople).send(operation.method.toUpperCase(), concrete(operation.path), { body, headers: { 'content-type': 'application/json' } })
      // Hot routes look a thing up before they look at the body.
      expect([...expected, 400, 404, 422], `${id}: ${what}: ${JSON.stringify(answer.body)}`).toContain(answer.status)
      expect(slugOfType(answer.body.type), `${id}: ${what}`).toBeDefined()
    }
  })

  test.each(['text/plain', 'application/xml', 'application/x-www-form-urlencoded', 'multipart/form-data; boundary=x', ''])('a body of type "%s" is not understood', async (type) => {
    const answer = await key.post('/v1/arms', '{"name":"a"}', { headers: type === '' ? { 'content-type': '' } : { 'content-type': type } })

    expectProblem(answer, 'unsupported-media-type')
  })

  test('a compressed body is not understood', async () => {
    const answer = await key.post('/v1/arms', '{"name":"a"}', { headers: { 'content-type': 'application/json', 'content-encoding': 'gzip' } })

    expectProblem(answer, 'unsupported-media-type')
  })

  test('a body of 100 MB is refused', async () => {
    const answer = await key.post('/v1/arms', new Uint8Array(100e6).fill(32), { headers: { 'content-type': 'application/json' } })

    expectProblem(answer, 'body-too-large')
  })

  test('the same 100 MB sent in pieces of unknown number are refused too', async () => {
    let sent = 0

    const response = await fetch(`${server.origin}/v1/arms`, {
      method: 'POST',
      headers: { authorization: `Bearer ${key.secret}`, 'content-type': 'application/json' },
      body: new ReadableStream({
        pull: (controller) => (sent++ < 100 ? controller.enqueue(new Uint8Array(1e6).fill(32)) : controller.close()),
      }),
      duplex: 'half',
    } as RequestInit)

    expect(response.status).toBe(413)
  })

  test('what is wrong is named with a pointer, what was found and what to do', async () => {
    const administrator = await team.signIn('administrator')

    const answer = await administrator.post('/v1/keys', { name: '', scopes: ['predict', 'fly'], colour: 'red' })

    expectProblem(answer, 'invalid-request')
    const byPointer = Object.fromEntries(answer.body.errors.map((fault: { pointer: string; detail: string }) => [fault.pointer, fault.detail]))
    expect(byPointer['/name']).toMatch(/0 characters; at least 1/)
    expect(byPointer['/scopes/1']).toMatch(/Found "fly", expected one of "predict"/)
    expect(byPointer['/colour']).toMatch(/not known here. Known: name, scopes, expires_at/)
  })
})

test('a mistake of ours answers 500 without saying what is inside', async () => {
  const broken = await server.another()
  const client = broken.api(key.secret)
  broken.services.arms.list = () => Promise.reject(new Error('secret detail in /somewhere/inside.ts'))

  const answer = await client.get('/v1/arms')

  expectProblem(answer, 'internal')
  expect(JSON.stringify(answer.body)).not.toContain('secret detail')
  expect(broken.reportedErrors.splice(0).join()).toContain('secret detail')
  await broken.stop()
})

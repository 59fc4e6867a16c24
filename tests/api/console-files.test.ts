import { existsSync, readdirSync, statSync } from 'node:fs'
import supertest from 'supertest'
import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import { startTestServer } from '../support/server.ts'
import type { TestServer } from '../support/server.ts'

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

describe.skipIf(!existsSync('console/dist/index.html'))('the built console', () => {
  // Small files are sent as they are, so the largest one is asked for.
  const script = () => {
    const sizes = readdirSync('console/dist/assets').filter((name) => name.endsWith('.js')).map((name) => ({ name, size: statSync(`console/dist/assets/${name}`).size }))
    return `/assets/${sizes.sort((a, b) => b.size - a.size)[0].name}`
  }

  test('comes compressed to a browser that takes it, and plain to one that does not', async () => {
    const compressed = await supertest(server.origin).get(script()).set('Accept-Encoding', 'gzip')
    const plain = await supertest(server.origin).get(script()).set('Accept-Encoding', 'identity')

    expect(compressed.headers['content-encoding']).toBe('gzip')
    expect(plain.headers['content-encoding']).toBeUndefined()
    expect(compressed.text).toBe(plain.text)
  })

  test('keeps hashed files for good and asks again for the page that names them', async () => {
    const file = await supertest(server.origin).get(script())
    const page = await supertest(server.origin).get('/adaptations').set('Accept', 'text/html')

    expect(file.headers['cache-control']).toBe('public, max-age=31536000, immutable')
    expect(page.headers['cache-control']).toBe('no-cache')
    expect(page.text).toContain('<div id="root"')
  })

  test('is not answered where a script or a missing file was asked for', async () => {
    await supertest(server.origin).get('/assets/gone.js').expect(404)
    await supertest(server.origin).get('/v1/nothing').set('Accept', 'text/html').expect(404).expect('Content-Type', /^application\/problem\+json/)
  })

  test('may load nothing from elsewhere and be framed by nobody', async () => {
    const { headers } = await supertest(server.origin).get('/').set('Accept', 'text/html')

    expect(headers['content-security-policy']).toContain("default-src 'none'")
    expect(headers['content-security-policy']).toContain("frame-ancestors 'none'")
    expect(headers['content-security-policy']).not.toContain('http')
  })
})

test('answers that hold secrets are never compressed', async () => {
  const team = await server.createTeam()
  const administrator = await team.signIn('administrator')

  const answer = await administrator.get('/v1/session', { headers: { 'accept-encoding': 'gzip' } })

  expect(answer.headers.get('content-encoding')).toBeNull()
})

import { mkdtempSync, rmSync, writeFileSync } from 'node:fs'
import { createServer } from 'node:http'
import type { AddressInfo } from 'node:net'
import { tmpdir } from 'node:os'
import { join } from 'node:path'
import { afterEach, beforeEach, describe, expect, it } from 'vitest'
import { connect, DemoError, findAddress } from '../../../sdk/demo/connection.ts'

let folder: string

beforeEach(() => {
  folder = mkdtempSync(join(tmpdir(), 'demo-'))
})

afterEach(() => rmSync(folder, { recursive: true }))

describe('where the demo finds the service', () => {
  it('is what the first start left in the data folder', () => {
    const credentials = { origin: 'http://127.0.0.1:8080', sign_ins: [], api_key: 'k' }
    writeFileSync(join(folder, 'demo-credentials.json'), JSON.stringify(credentials))

    expect(findAddress({ HEFTWISE_DATA_DIR: folder })).toEqual({ url: 'http://127.0.0.1:8080', key: 'k' })
    expect(findAddress({ HEFTWISE_DATA_DIR: folder, HEFTWISE_URL: 'http://other' })).toEqual({ url: 'http://other', key: 'k' })
  })

  it('is the environment alone where that says both', () => {
    expect(findAddress({ HEFTWISE_URL: 'http://other', HEFTWISE_KEY: 'x' })).toEqual({ url: 'http://other', key: 'x' })
  })

  it('is asked for in a sentence where neither is there', () => {
    expect(() => findAddress({ HEFTWISE_DATA_DIR: folder })).toThrow(DemoError)
    expect(() => findAddress({ HEFTWISE_DATA_DIR: folder })).toThrow(/Run npm start once/)
    writeFileSync(join(folder, 'demo-credentials.json'), '{}')
    expect(() => findAddress({ HEFTWISE_DATA_DIR: folder })).toThrow(/holds no origin and api_key/)
  })
})

describe('connecting', () => {
  const { signal } = new AbortController()

  it('says how to start a service that does not answer', async () => {
    const server = createServer().listen(0, '127.0.0.1')
    await new Promise((resolve) => server.once('listening', resolve))
    const { port } = server.address() as AddressInfo
    await new Promise((resolve) => server.close(resolve))

    const url = `http://127.0.0.1:${port}`
    await expect(connect({ url, key: 'k' }, 'alder-7', signal)).rejects.toThrow(/does not answer .* npm start/)
  })

  const answers: [number, RegExp][] = [
    [401, /refuses the key/],
    [404, /knows no arm "alder-7"/],
  ]
  for (const [status, want] of answers) {
    it(`explains an answer of ${status}`, async () => {
      const server = createServer((_request, response) => {
        const problem = { type: 'x', title: 't', status, detail: 'd' }
        response.writeHead(status, { 'content-type': 'application/problem+json' }).end(JSON.stringify(problem))
      }).listen(0, '127.0.0.1')
      await new Promise((resolve) => server.once('listening', resolve))
      const { port } = server.address() as AddressInfo

      await expect(connect({ url: `http://127.0.0.1:${port}`, key: 'k' }, 'alder-7', signal)).rejects.toThrow(want)
      server.close()
    })
  }
})

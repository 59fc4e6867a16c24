import { createServer, type IncomingMessage, type Server, type ServerResponse } from 'node:http'
import type { AddressInfo } from 'node:net'
import { afterEach, describe, expect, it } from 'vitest'
import { ConnectionError, everyItem, Heftwise, isProblem, ProblemError, TimeoutError } from '../../../sdk/index.ts'

const quick = { attempts: 3, baseMs: 1, longestMs: 5 }
const states = { joints: '7c1f0a52b3de', position: [[0]], velocity: [[0]], acceleration: [[0]] }
let server: Server | undefined

afterEach(() => {
  server?.closeAllConnections()
  server?.close()
})

async function serve(answer: (request: IncomingMessage, response: ServerResponse, count: number) => void): Promise<{ url: string; requests: IncomingMessage[] }> {
  const requests: IncomingMessage[] = []
  server = createServer((request, response) => {
    requests.push(request)
    request.resume().on('end', () => answer(request, response, requests.length))
  })
  await new Promise<void>((resolve) => server!.listen(0, '127.0.0.1', resolve))
  return { url: `http://127.0.0.1:${(server.address() as AddressInfo).port}`, requests }
}

async function collect<T>(items: AsyncIterable<T>): Promise<T[]> {
  const all: T[] = []
  for await (const item of items) all.push(item)
  return all
}

function problem(response: ServerResponse, status: number, slug: string, headers: Record<string, string> = {}): void {
  response.writeHead(status, { 'content-type': 'application/problem+json', ...headers })
  response.end(JSON.stringify({ type: `tag:heftwise.invalid,2026:${slug}`, title: 'T', status, detail: 'D', request_id: 'r-1' }))
}

describe('the client', () => {
  it('repeats a prediction after 503 for as long as Retry-After says', async () => {
    const { url, requests } = await serve((_, response, count) => {
      if (count === 1) problem(response, 503, 'not-ready', { 'retry-after': '1' })
      else response.setHeader('content-type', 'application/json').end('{"torque":[[1]]}')
    })
    const started = performance.now()

    const answer = await new Heftwise({ url, retry: quick }).predict('m', states)

    expect(answer.torque).toEqual([[1]])
    expect(requests).toHaveLength(2)
    expect(performance.now() - started).toBeGreaterThan(990)
  })

  it('never repeats the making of a key, whose secret is answered once', async () => {
    const { url, requests } = await serve((_, response) => problem(response, 503, 'not-ready'))

    await expect(new Heftwise({ url, retry: quick }).keys.create({ name: 'k', scopes: ['read'] })).rejects.toThrow(ProblemError)

    expect(requests).toHaveLength(1)
  })

  it('repeats a post under one and the same Idempotency-Key', async () => {
    const { url, requests } = await serve((_, response, count) => {
      if (count < 3) response.destroy()
      else response.writeHead(201, { 'content-type': 'application/json' }).end('{"name":"m"}')
    })

    await new Heftwise({ url, retry: quick }).models.create({ name: 'm', arm: 'a' })

    const keys = new Set(requests.map((request) => request.headers['idempotency-key']))
    expect(requests).toHaveLength(3)
    expect(keys.size).toBe(1)
  })

  it('does not repeat a refusal, and says its cause', async () => {
    const { url, requests } = await serve((_, response) => problem(response, 409, 'sequence-gap'))

    const error = await new Heftwise({ url, retry: quick }).predict('m', states).catch((caught: unknown) => caught)

    expect(isProblem(error, 'sequence-gap')).toBe(true)
    expect((error as ProblemError).requestId).toBe('r-1')
    expect(requests).toHaveLength(1)
  })

  it('tells a time-out from a service that is not there', async () => {
    const { url } = await serve(() => undefined)
    const slow = new Heftwise({ url, timeoutMs: 30, retry: { attempts: 0 } })
    const gone = new Heftwise({ url: 'http://127.0.0.1:9', retry: { attempts: 0 } })

    await expect(slow.session.get()).rejects.toThrow(TimeoutError)
    await expect(gone.session.get()).rejects.toThrow(ConnectionError)
  })

  it('stops waiting between tries when the signal aborts', async () => {
    const { url } = await serve((_, response) => problem(response, 503, 'not-ready', { 'retry-after': '60' }))
    const abort = new AbortController()
    setTimeout(() => abort.abort(new Error('controller stops')), 50)

    await expect(new Heftwise({ url }).predict('m', states, { signal: abort.signal })).rejects.toThrow('controller stops')
  })

  it('follows cursors to the end of a list', async () => {
    const { url, requests } = await serve((request, response) => {
      const second = request.url!.includes('cursor=next%26')
      response.setHeader('content-type', 'application/json').end(JSON.stringify({ items: [second ? 2 : 1], next_cursor: second ? null : 'next&' }))
    })
    const client = new Heftwise({ url })

    const items = await collect(everyItem((cursor) => client.keys.list({ cursor, limit: 1 })))

    expect(items).toEqual([1, 2])
    expect(requests).toHaveLength(2)
  })

  it('watches a job to its end over a stream that breaks', async () => {
    const { url } = await serve((request, response, count) => {
      const job = (state: string) => JSON.stringify({ id: 'j', state })
      if (!request.url!.endsWith('/events')) return void response.setHeader('content-type', 'application/json').end(job('running'))
      response.writeHead(200, { 'content-type': 'text/event-stream' })
      if (count === 1) {
        response.write('event: job\r')
        setTimeout(() => response.write(`\ndata: ${job('queued')}\r\n\r\n: still here\n\nevent: point\ndata: {}\n\nevent: job\rdata: ${job('running')}\r\r: go on`), 30)
        setTimeout(() => response.destroy(), 80)
      } else response.end(`event: job\ndata: ${job('done')}\n\n`)
    })

    const seen = (await collect(new Heftwise({ url, retry: quick }).jobs.watch('j'))).map((job) => job.state)

    expect(seen).toEqual(['queued', 'running', 'done'])
  })
})

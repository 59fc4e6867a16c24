import { connect } from 'node:net'
import type { Socket } from 'node:net'

/** What one run of requests took. */
export interface Run {
  readonly requests: number
  readonly seconds: number
  /** Latencies, sorted, ms. */
  readonly latencies: Float64Array
  /** Answers by status. */
  readonly statuses: ReadonlyMap<number, number>
}

/** A keep-alive HTTP/1.1 connection that costs the load generator little: whole requests are written as bytes. */
class Connection {
  readonly #socket: Socket
  #received: Buffer = Buffer.alloc(0)
  #settle: { resolve: (answer: { status: number; body: Buffer }) => void; reject: (error: Error) => void } | undefined

  private constructor(socket: Socket) {
    this.#socket = socket
    socket.setNoDelay(true)
    socket.on('data', (part) => this.#take(part))
    socket.on('error', (error) => this.#settle?.reject(error))
    socket.on('close', () => this.#settle?.reject(new Error('The server closed the connection.')))
  }

  static open(port: number): Promise<Connection> {
    return new Promise((resolve, reject) => {
      const socket = connect(port, '127.0.0.1')
      socket.once('error', reject)
      socket.once('connect', () => {
        socket.off('error', reject)
        resolve(new Connection(socket))
      })
    })
  }

  send(request: Buffer): Promise<{ status: number; body: Buffer }> {
    return new Promise((resolve, reject) => {
      this.#settle = { resolve, reject }
      this.#socket.write(request)
    })
  }

  close(): void {
    this.#settle = undefined
    this.#socket.destroy()
  }

  #take(part: Buffer): void {
    this.#received = this.#received.length === 0 ? part : Buffer.concat([this.#received, part])
    const end = this.#received.indexOf('\r\n\r\n')
    if (end < 0) return
    const head = this.#received.toString('latin1', 0, end)
    const length = Number(/\r\ncontent-length: *(\d+)/i.exec(head)?.[1] ?? 0)
    if (this.#received.length < end + 4 + length) return
    const body = this.#received.subarray(end + 4, end + 4 + length)
    const status = Number(head.slice(9, 12))
    this.#received = this.#received.subarray(end + 4 + length)
    const settle = this.#settle
    this.#settle = undefined
    settle?.resolve({ status, body })
  }
}

export function requestBytes(path: string, headers: Record<string, string>, body: string | Buffer): Buffer {
  const bytes = Buffer.from(body)
  const lines = Object.entries({ host: '127.0.0.1', ...headers, 'content-length': String(bytes.length) }).map(([name, value]) => `${name}: ${value}\r\n`)
  return Buffer.concat([Buffer.from(`POST ${path} HTTP/1.1\r\n${lines.join('')}\r\n`), bytes])
}

export async function sendOnce(port: number, request: Buffer): Promise<{ status: number; body: Buffer }> {
  const connection = await Connection.open(port)
  try {
    return await connection.send(request)
  } finally {
    connection.close()
  }
}

/**
 * Keeps so many connections busy until all requests are answered.
 *
 * @param next  the request that a connection sends as its k-th
 */
export async function drive(
  port: number, { connections, requests, next }: { connections: number; requests: number; next: (connection: number, k: number) => Buffer },
): Promise<Run> {
  const open = await Promise.all(Array.from({ length: connections }, () => Connection.open(port)))
  const latencies = new Float64Array(requests)
  const statuses = new Map<number, number>()
  let started = 0
  let done = 0
  const begin = performance.now()
  await Promise.all(open.map(async (connection, c) => {
    for (let k = 0; started < requests; k++) {
      started++
      const request = next(c, k)
      const sentAt = performance.now()
      const { status } = await connection.send(request)
      latencies[done++] = performance.now() - sentAt
      statuses.set(status, (statuses.get(status) ?? 0) + 1)
    }
  }))
  const seconds = (performance.now() - begin) / 1000
  for (const connection of open) connection.close()
  return { requests, seconds, latencies: latencies.sort(), statuses }
}

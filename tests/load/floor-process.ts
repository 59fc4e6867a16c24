import { createServer } from 'node:http'
import type { AddressInfo } from 'node:net'

// The floor: bare node:http with keep-alive, JSON.parse of the body, a fixed answer of so many bytes (x-answer-bytes).

const answers = new Map<number, Buffer>()
let kept: unknown

const server = createServer((req, res) => {
  const parts: Buffer[] = []
  req.on('data', (part: Buffer) => parts.push(part))
  req.on('end', () => {
    kept = JSON.parse((parts.length === 1 ? parts[0] : Buffer.concat(parts)).toString())
    const size = Number(req.headers['x-answer-bytes'])
    let answer = answers.get(size)
    if (answer === undefined) answers.set(size, (answer = Buffer.alloc(size, 32)))
    res.writeHead(200, { 'Content-Type': 'application/json', 'Content-Length': size })
    res.end(answer)
  })
})
server.keepAliveTimeout = 60_000
server.listen(0, '127.0.0.1', () => process.send?.({ port: (server.address() as AddressInfo).port }))
process.on('disconnect', () => process.exit(kept === undefined ? 1 : 0))

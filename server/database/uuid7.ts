import { randomBytes } from 'node:crypto'

let lastMs = 0
let counter = 0

/**
 * A UUID of version 7: sorts by the time it was made. Within one millisecond the 12 bits after the version count up, so
 * ids of one process rise strictly (RFC 9562, sections 5.7 and 6.2, method 1).
 */
export function uuid7(nowMs: number = Date.now()): string {
  const random = randomBytes(10)
  if (nowMs > lastMs) {
    lastMs = nowMs
    counter = random.readUInt16BE(0) & 0x7ff
  } else if (++counter > 0xfff) {
    lastMs++
    counter = random.readUInt16BE(0) & 0x7ff
  }
  const time = lastMs.toString(16).padStart(12, '0')
  const variant = (0x8000 | (random.readUInt16BE(2) & 0x3fff)).toString(16)
  const tail = random.toString('hex', 4, 10)
  return `${time.slice(0, 8)}-${time.slice(8)}-7${counter.toString(16).padStart(3, '0')}-${variant}-${tail}`
}

import type { Request } from 'express'
import { Refusal } from '../../../shared/contract/problems.ts'

const mostBytes = 4 << 20

/**
 * Reads a hot body whole, up to 4 MiB. What comes after that is thrown away as it arrives, so that the sender gets to read the
 * refusal instead of a broken connection.
 */
export function readHotBody(req: Request): Promise<Buffer> {
  const { 'content-encoding': encoding, 'content-length': length } = req.headers
  if (encoding !== undefined && encoding.toLowerCase() !== 'identity') {
    throw new Refusal('unsupported-media-type', `Content-Encoding is "${encoding}"; bodies are taken uncompressed only.`)
  }
  if (length !== undefined && Number(length) > mostBytes) {
    req.resume()
    throw tooLarge()
  }
  return new Promise((resolve, reject) => {
    let first: Buffer | undefined
    let more: Buffer[] | undefined
    let size = 0
    req.on('data', (part: Buffer) => {
      size += part.length
      if (size > mostBytes) {
        first = more = undefined
        reject(tooLarge())
      } else if (first === undefined) first = part
      else if (more === undefined) more = [first, part]
      else more.push(part)
    })
    req.on('end', () => resolve(more === undefined ? first ?? Buffer.alloc(0) : Buffer.concat(more, size)))
    req.on('error', () => reject(new Refusal('malformed-body', 'The connection broke before the whole body had come.')))
  })
}

function tooLarge(): Refusal {
  return new Refusal('body-too-large', 'The body is larger than 4 MiB, which is the most this route takes. Send fewer rows at a time.')
}

import type { Request } from 'express'
import { Refusal } from '../../shared/contract/problems.ts'

const utf8 = new TextDecoder('utf-8', { fatal: true })

/**
 * Reads a body whole, up to a limit. What comes after the limit is thrown away as it arrives, so that the sender gets to
 * read the refusal instead of a broken connection.
 */
export function readBody(req: Request, limitBytes: number): Promise<Buffer> {
  const encoding = req.headers['content-encoding']
  if (encoding !== undefined && encoding.toLowerCase() !== 'identity') {
    throw new Refusal('unsupported-media-type', `Content-Encoding is "${encoding}"; bodies are taken uncompressed only.`)
  }
  if (Number(req.headers['content-length'] ?? 0) > limitBytes) throw tooLarge(limitBytes)
  return new Promise((resolve, reject) => {
    const parts: Buffer[] = []
    let size = 0
    const settle = (act: () => void) => {
      req.off('data', onData).off('end', onEnd).off('error', onBroken).off('close', onBroken)
      act()
    }
    const onData = (part: Buffer) => {
      size += part.length
      if (size <= limitBytes) parts.push(part)
      else settle(() => (req.resume(), reject(tooLarge(limitBytes))))
    }
    const onEnd = () => settle(() => resolve(parts.length === 1 ? parts[0]! : Buffer.concat(parts, size)))
    const onBroken = () => settle(() => reject(new Refusal('malformed-body', 'The connection broke before the whole body had come.')))
    req.on('data', onData).on('end', onEnd).on('error', onBroken).on('close', onBroken)
  })
}

function tooLarge(limitBytes: number): Refusal {
  return new Refusal('body-too-large', `The body is larger than ${limitBytes / 1024 / 1024} MiB, which is the most this route takes. Send less at a time.`)
}

export const maxDepth = 64

/** @throws {Refusal} malformed-body: not UTF-8, not JSON, or nested deeper than anything in the contract */
export function parseJson(bytes: Buffer): unknown {
  if (bytes.length === 0) throw new Refusal('malformed-body', 'The body is empty. Send a JSON object.')
  let text: string
  try {
    text = utf8.decode(bytes)
  } catch (error) {
    throw new Refusal('malformed-body', 'The body is not UTF-8. Send JSON in UTF-8.', { cause: error })
  }
  refuseDeepNesting(text)
  try {
    return JSON.parse(text)
  } catch (error) {
    const hint = /\b(?:NaN|Infinity)\b/.test(text) ? ' JSON has no NaN and no Infinity: leave out rows that hold them.' : ''
    throw new Refusal('malformed-body', `The body is not JSON: ${(error as Error).message}.${hint}`, { cause: error })
  }
}

function refuseDeepNesting(text: string): void {
  let depth = 0
  let inString = false
  for (let i = 0; i < text.length; i++) {
    const code = text.charCodeAt(i)
    if (inString) {
      if (code === 92) i++
      else if (code === 34) inString = false
    } else if (code === 34) inString = true
    else if (code === 91 || code === 123) {
      if (++depth > maxDepth) throw new Refusal('malformed-body', `The body is nested deeper than ${maxDepth} levels, which no request of the contract is.`)
    } else if (code === 93 || code === 125) depth--
  }
}

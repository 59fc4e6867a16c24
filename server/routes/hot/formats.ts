import type { Request } from 'express'
import { Refusal } from '../../../shared/contract/problems.ts'
import { CborError, readCbor } from './cbor-reader.ts'
import { readPlainJson } from './json-reader.ts'

/** What hot bodies and answers are written in. */
export type Format = 'json' | 'cbor'

const types = { json: 'application/json', cbor: 'application/cbor' } as const

/** @throws {Refusal} unsupported-media-type */
export function sentFormat(req: Request): Format {
  const header = req.headers['content-type']
  if (header === types.json) return 'json'
  if (header === types.cbor) return 'cbor'
  const type = (header ?? '').split(';', 1)[0].trim().toLowerCase()
  if (type === types.json) return 'json'
  if (type === types.cbor) return 'cbor'
  const found = header === undefined ? 'There is no Content-Type' : `Content-Type is "${header.slice(0, 80)}"`
  throw new Refusal('unsupported-media-type', `${found}; this route takes application/json or application/cbor.`, {
    headers: { Accept: 'application/json, application/cbor' },
  })
}

/** What the sender wants back: what Accept prefers; where it leaves that open, what was sent. @throws {Refusal} not-acceptable */
export function wantedFormat(req: Request, sent: Format): Format {
  const header = req.headers.accept
  if (header === undefined || header === '*/*') return sent
  const other = sent === 'json' ? 'cbor' : 'json'
  if (header === types[sent]) return sent
  if (header === types[other]) return other
  const found = req.accepts(types[sent], types[other])
  if (found === false) {
    throw new Refusal('not-acceptable', `Accept is "${header.slice(0, 120)}"; this route answers application/json or application/cbor.`)
  }
  return found === types[sent] ? sent : other
}

export function contentType(format: Format): string {
  return types[format]
}

const utf8 = new TextDecoder('utf-8', { fatal: true })

/** @throws {Refusal} malformed-body */
export function parseBody(format: Format, bytes: Buffer): unknown {
  if (bytes.length === 0) throw new Refusal('malformed-body', 'The body is empty. Send an object.')
  return format === 'json' ? readPlainJson(bytes) ?? parseJson(bytes) : parseCbor(bytes)
}

/** Without a look at nesting: the engine's parser does not recurse, and a nested value is refused as no number. */
function parseJson(bytes: Buffer): unknown {
  let text: string
  try {
    text = utf8.decode(bytes)
  } catch (cause) {
    throw new Refusal('malformed-body', 'The body is not UTF-8. Send JSON in UTF-8.', { cause })
  }
  try {
    return JSON.parse(text)
  } catch (cause) {
    const hint = /\b(?:NaN|Infinity|nan|inf)\b/.test(text) ? ' JSON has no NaN and no Infinity: leave out rows that hold them.' : ''
    throw new Refusal('malformed-body', `The body is not JSON: ${(cause as Error).message.slice(0, 200)}.${hint}`, { cause })
  }
}

function parseCbor(bytes: Buffer): unknown {
  try {
    return readCbor(bytes)
  } catch (cause) {
    if (!(cause instanceof CborError)) throw cause
    throw new Refusal('malformed-body', `The body is not CBOR that this route takes: ${cause.message}.`, { cause })
  }
}

import { createHash } from 'node:crypto'

/** The short name of an arm's joint list: the first 12 hex digits of SHA-256 over the names, joined by line feeds. */
export function jointsFingerprint(names: readonly string[]): string {
  return createHash('sha256').update(names.join('\n')).digest('hex').slice(0, 12)
}

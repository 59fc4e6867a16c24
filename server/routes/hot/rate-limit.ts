import { createHash } from 'node:crypto'
import type { Response } from 'express'
import { Refusal } from '../../../shared/contract/problems.ts'
import type { Caller } from '../../services/permissions.ts'

const windowMs = 60_000
const mostWindows = 10_000

interface Window {
  count: number
  endsAt: number
  readonly policy: string
}

/**
 * At most so many requests a minute and caller, told in RateLimit and RateLimit-Policy (IETF httpapi draft) in the very form of
 * middleware/limits.ts. Not that middleware, because it hashes the caller, looks for proxies and awaits four times a request:
 * as much as all the rest of a one-row predict.
 */
export class HotLimit {
  readonly #name: string
  readonly #limit: number
  readonly #windows = new Map<string, Window>()

  constructor(name: string, limit: number) {
    this.#name = name
    this.#limit = limit
  }

  /** @throws {Refusal} rate-limited */
  count(res: Response, caller: Caller): void {
    const now = performance.now()
    const window = this.#windowOf(caller, now)
    window.count++
    const seconds = Math.ceil((window.endsAt - now) / 1000)
    res.setHeader('RateLimit', `"${this.#name}"; r=${Math.max(this.#limit - window.count, 0)}; t=${seconds}`)
    res.setHeader('RateLimit-Policy', window.policy)
    if (window.count <= this.#limit) return
    throw new Refusal('rate-limited', `More than ${this.#limit} requests in a minute. Try again in ${seconds} s.`, { headers: { 'Retry-After': String(seconds) } })
  }

  #windowOf(caller: Caller, now: number): Window {
    const known = this.#windows.get(caller.id)
    if (known !== undefined && now < known.endsAt) return known
    if (known === undefined && this.#windows.size >= mostWindows) this.#forgetEnded(now)
    const window = { count: 0, endsAt: now + windowMs, policy: known?.policy ?? this.#policyFor(caller) }
    this.#windows.set(caller.id, window)
    return window
  }

  /** The partition key tells a caller's policies apart without giving its id away. */
  #policyFor({ kind, id }: Caller): string {
    const partition = Buffer.from(createHash('sha256').update(`${kind} ${id}`).digest('hex').slice(0, 12)).toString('base64')
    return `"${this.#name}"; q=${this.#limit}; w=${windowMs / 1000}; pk=:${partition}:`
  }

  #forgetEnded(now: number): void {
    for (const [id, { endsAt }] of this.#windows) if (endsAt <= now) this.#windows.delete(id)
  }
}

import { Refusal } from '../../../shared/contract/problems.ts'
import type { Fault, ProblemSlug } from '../../../shared/contract/problems.ts'

/** More would not help anyone to put a request right. */
const most = 20

/** What is wrong with one request, collected so that one answer tells all of it. */
export class Faults {
  readonly #list: Fault[] = []
  #slug: ProblemSlug | undefined

  get any(): boolean {
    return this.#list.length > 0
  }

  get full(): boolean {
    return this.#list.length >= most
  }

  /** The first fault's slug is the problem's type. */
  add(fault: Fault, slug: ProblemSlug = 'invalid-request'): void {
    this.#slug ??= slug
    if (!this.full) this.#list.push(fault)
  }

  /** @throws {Refusal} when there is any */
  refuse(): void {
    if (this.#slug !== undefined) throw new Refusal(this.#slug, this.#list[0].detail, { errors: this.#list })
  }
}

/** How a value is named in a message: short, and never a whole payload. */
export function shown(value: unknown): string {
  if (value === null) return 'null'
  if (Array.isArray(value)) return `an array of ${value.length}`
  if (typeof value === 'string') return value.length > 40 ? `a text of ${value.length} characters` : JSON.stringify(value)
  if (typeof value === 'object') return value instanceof Float64Array ? `a typed array of ${value.length}` : 'an object'
  return String(value)
}

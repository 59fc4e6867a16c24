import type { ErrorObject } from 'ajv/dist/2020.js'
import type { Fault } from '../../shared/contract/problems.ts'

/** One finding of the schema validator as a sentence: what was found, what was expected, what to do. */
export function faultOf(error: ErrorObject): Fault {
  const pointer = error.keyword === 'required' || error.keyword === 'additionalProperties' ? `${error.instancePath}/${escapePointer(named(error))}` : error.instancePath
  return { pointer, detail: sentence(error) }
}

function named(error: ErrorObject): string {
  const params = error.params as { missingProperty?: string; additionalProperty?: string }
  return params.missingProperty ?? params.additionalProperty ?? ''
}

function escapePointer(segment: string): string {
  return segment.replaceAll('~', '~0').replaceAll('/', '~1')
}

function sentence(error: ErrorObject): string {
  const p = error.params as Record<string, unknown>
  const found = isSecret(error.instancePath) ? 'a value' : show(error.data)
  switch (error.keyword) {
    case 'required':
      return `"${String(p.missingProperty)}" is missing. Add it.`
    case 'additionalProperties': {
      const known = Object.keys((error.parentSchema as { properties?: object } | undefined)?.properties ?? {})
      return `"${shorten(String(p.additionalProperty))}" is not known here. Known: ${known.join(', ') || 'nothing'}.`
    }
    case 'type': {
      const wanted = [p.type].flat().join(' or ')
      return error.data === null ? `Found null, expected ${wanted}. Leave the field out if there is no value.` : `Found ${found}, expected ${wanted}.`
    }
    case 'enum':
      return `Found ${found}, expected one of ${(p.allowedValues as unknown[]).map((value) => JSON.stringify(value)).join(', ')}.`
    case 'const':
      return `Found ${found}, expected ${JSON.stringify(p.allowedValue)}.`
    case 'pattern': {
      const meaning = (error.parentSchema as { description?: string } | undefined)?.description
      return `Found ${found}; it must match ${String(p.pattern)}.${meaning ? ` ${meaning}` : ''}`
    }
    case 'format':
      return `Found ${found}, expected ${formatNames[String(p.format)] ?? String(p.format)}.`
    case 'minLength':
      return `It has ${(error.data as string).length} characters; at least ${String(p.limit)} are needed.`
    case 'maxLength':
      return `It has ${(error.data as string).length} characters; at most ${String(p.limit)} are taken.`
    case 'minItems':
      return `It has ${(error.data as unknown[]).length} entries; at least ${String(p.limit)} are needed.`
    case 'maxItems':
      return `It has ${(error.data as unknown[]).length} entries; at most ${String(p.limit)} are taken.`
    case 'uniqueItems':
      return `Entries ${String(p.j)} and ${String(p.i)} are the same. Name each once.`
    case 'minimum':
    case 'maximum':
    case 'exclusiveMinimum':
    case 'exclusiveMaximum':
      return `Found ${found}; it must be ${String(p.comparison)} ${String(p.limit)}.`
    case 'oneOf':
      return oneOfSentence(error)
    default:
      return `It ${error.message ?? 'does not fit the contract'}.`
  }
}

function isSecret(pointer: string): boolean {
  return /\/(?:password|current|new|secret)$/.test(pointer)
}

function oneOfSentence(error: ErrorObject): string {
  const branches = error.schema as { required?: string[] }[]
  const fields = branches.map((branch) => branch.required?.join(' and '))
  if (fields.every((text) => text !== undefined)) return `Exactly one of ${fields.join(', ')} is needed.`
  return `Found ${show(error.data)}, which fits none of the forms this takes, or more than one.`
}

const formatNames: Record<string, string> = {
  'date-time': 'a time with its zone such as 2026-12-01T08:30:00Z (RFC 3339)',
  uuid: 'an id such as 0193a5c2-7d1e-7cc0-a1b2-3c4d5e6f7081',
}

function show(value: unknown): string {
  if (Array.isArray(value)) return `a list of ${value.length}`
  if (typeof value === 'object' && value !== null) return 'an object'
  return shorten(JSON.stringify(value) ?? String(value))
}

function shorten(text: string): string {
  return text.length <= 60 ? text : `${text.slice(0, 57)}…`
}

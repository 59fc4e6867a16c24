import { readFileSync } from 'node:fs'
import { Ajv2020 } from 'ajv/dist/2020.js'
import type { ErrorObject, ValidateFunction } from 'ajv/dist/2020.js'
import addFormats from 'ajv-formats'
import { parse } from 'yaml'
import type { components, operations } from '../../shared/contract/openapi.generated.ts'
import type { Action } from '../services/permissions.ts'

export type OperationId = keyof operations
export type Method = 'get' | 'post' | 'put' | 'patch' | 'delete'

export interface Operation {
  readonly id: OperationId
  readonly method: Method
  /** As in the file: `/v1/arms/{arm}`. */
  readonly path: string
  readonly action: Action | 'anyone'
  readonly takesKey: boolean
  readonly takesSession: boolean
  readonly takesIdempotencyKey: boolean
  /** Media types of the body; empty: none. */
  readonly bodyTypes: readonly string[]
  /** Media types of successful answers. */
  readonly answerTypes: readonly string[]
}

interface RawParameter {
  name: string
  in: 'path' | 'query' | 'header'
  required?: boolean
  schema: unknown
}

interface RawContent {
  [type: string]: { schema?: { $ref?: string; discriminator?: { propertyName: string; mapping: Record<string, string> } } }
}

interface RawOperation {
  operationId: OperationId
  'x-action': Action | 'anyone'
  security?: Record<string, unknown>[]
  parameters?: ({ $ref?: string } & RawParameter)[]
  requestBody?: { $ref?: string; content?: RawContent }
  responses: Record<string, { $ref?: string; content?: RawContent; headers?: Record<string, unknown> }>
}

interface RawDocument {
  security: Record<string, unknown>[]
  paths: Record<string, Record<string, RawOperation> & { parameters?: RawOperation['parameters'] }>
  components: Record<string, Record<string, unknown>>
}

export type ParameterPlace = 'path' | 'query' | 'header'
export type Check = (value: unknown) => ErrorObject[]

export interface ContractDocument {
  readonly text: string
  readonly document: object
  readonly operations: readonly Operation[]
  operation(id: OperationId): Operation
  /** The operations of the path template that a concrete path fits; empty: no such path. */
  operationsAt(path: string): readonly Operation[]
  /** Checks and, in place, coerces what came as text and fills in defaults. */
  parameterCheck(id: OperationId, place: ParameterPlace): Check
  /** Header names in small letters. */
  parameterNames(id: OperationId, place: ParameterPlace): readonly string[]
  bodyCheck(id: OperationId, type: string): Check
  /** For values that the contract says are JSON inside a form's field. */
  schemaCheck(name: keyof components['schemas']): Check
  /** undefined: the contract lists no such answer. */
  answerCheck(id: OperationId, status: number, type: string): Check | undefined
}

const file = new URL('../../openapi.yaml', import.meta.url)
const methods: readonly Method[] = ['get', 'post', 'put', 'patch', 'delete']
const documentId = 'contract'

/** Reads openapi.yaml, the source of routes, permissions and validation. */
export function loadContract(): ContractDocument {
  const text = readFileSync(file, 'utf8')
  const document = parse(text) as RawDocument
  const schemas = { $id: documentId, paths: document.paths, components: document.components }
  // A first look stops at the first fault, which bounds its work; only small bodies get the full list.
  const strictBodies = compiler(schemas, { useDefaults: true })
  const thoroughBodies = compiler(schemas, { useDefaults: true, allErrors: true })
  const parameters = compiler(schemas, { useDefaults: true, coerceTypes: true, allErrors: true })
  const answers = compiler(schemas, { allErrors: true })

  const raw = new Map<OperationId, { pointer: string; operation: RawOperation; parameters: RawParameter[] }>()
  const operations: Operation[] = []
  for (const [path, item] of Object.entries(document.paths)) {
    for (const method of methods) {
      const operation = item[method]
      if (!operation) continue
      const listed = [...(item.parameters ?? []), ...(operation.parameters ?? [])].map((parameter) => resolve(document, parameter) as RawParameter)
      raw.set(operation.operationId, { pointer: `/paths/${escapePointer(path)}/${method}`, operation, parameters: listed })
      operations.push(describe(document, path, method, operation, listed))
    }
  }
  const byId = new Map(operations.map((operation) => [operation.id, operation]))
  const templates = [...new Set(operations.map(({ path }) => path))]
    // A fixed segment goes before a parameter: /keys/current before /keys/{key}.
    .sort((a, b) => (a.replaceAll(/\{[^}]+\}/g, '~') < b.replaceAll(/\{[^}]+\}/g, '~') ? -1 : 1))
    .map((path) => ({
      pattern: new RegExp(`^${path.replaceAll('.', '\\.').replaceAll(/\{[^}]+\}/g, '[^/]+')}$`),
      operations: operations.filter((operation) => operation.path === path),
    }))

  // Compiled when first asked for: most processes, tests above all, use few of them.
  const cached = new Map<string, Check | undefined>()
  const once = <T extends Check | undefined>(key: string, make: () => T): T => {
    if (!cached.has(key)) cached.set(key, make())
    return cached.get(key) as T
  }

  return {
    text,
    document,
    operations,
    operation: (id) => {
      const operation = byId.get(id)
      if (!operation) throw new Error(`openapi.yaml has no operation ${id}.`)
      return operation
    },
    operationsAt: (path) => templates.find(({ pattern }) => pattern.test(path))?.operations ?? [],
    parameterNames: (id, place) => Object.keys(parameterSchema(raw.get(id)!.parameters, place).properties),
    parameterCheck: (id, place) =>
      once(`${id} ${place}`, () => checkWith(parameters.compile(parameterSchema(raw.get(id)!.parameters, place)))),
    bodyCheck: (id, type) =>
      once(`${id} body ${type}`, () => {
        const { pointer, operation } = raw.get(id)!
        const at = operation.requestBody?.$ref?.slice(1) ?? `${pointer}/requestBody`
        const schema = `${documentId}#${at}/content/${escapePointer(type)}/schema`
        const content = (resolve(document, operation.requestBody) as RawOperation['requestBody'])?.content?.[type]
        const discriminator = content?.schema?.discriminator
        const quick = bodyValidator(strictBodies, schema, discriminator)
        const thorough = bodyValidator(thoroughBodies, schema, discriminator)
        return (value) => {
          const first = quick(value)
          return first.length > 0 && isSmall(value) ? thorough(value) : first
        }
      }),
    schemaCheck: (name) => once(`schema ${name}`, () => checkWith(thoroughBodies.compile({ $ref: `${documentId}#/components/schemas/${name}` }))),
    answerCheck: (id, status, type) =>
      once(`${id} ${status} ${type}`, () => {
        const { pointer, operation } = raw.get(id)!
        const key = operation.responses[status] ? String(status) : status >= 400 ? 'default' : undefined
        if (!key) return undefined
        const response = operation.responses[key]!
        const content = (resolve(document, response) as { content?: RawContent }).content
        if (!content) return type === '' ? () => [] : undefined
        if (!content[type]) return undefined
        const at = response.$ref?.slice(1) ?? `${pointer}/responses/${key}`
        return checkWith(answers.compile({ $ref: `${documentId}#${at}/content/${escapePointer(type)}/schema` }))
      }),
  }
}

function describe(document: RawDocument, path: string, method: Method, operation: RawOperation, parameters: readonly RawParameter[]): Operation {
  const security = operation.security ?? document.security
  const body = resolve(document, operation.requestBody) as RawOperation['requestBody']
  const successes = Object.entries(operation.responses).filter(([status]) => status.startsWith('2'))
  return {
    id: operation.operationId,
    method,
    path,
    action: operation['x-action'],
    takesKey: security.some((entry) => 'bearerKey' in entry),
    takesSession: security.some((entry) => 'consoleSession' in entry),
    takesIdempotencyKey: parameters.some(({ name }) => name === 'Idempotency-Key'),
    bodyTypes: Object.keys(body?.content ?? {}),
    answerTypes: [...new Set(successes.flatMap(([, response]) => Object.keys((resolve(document, response) as { content?: RawContent }).content ?? {})))],
  }
}

function compiler(schemas: object, options: ConstructorParameters<typeof Ajv2020>[0]): Ajv2020 {
  const ajv = new Ajv2020({ strict: false, verbose: true, validateSchema: false, ...options })
  addFormats.default(ajv)
  ajv.addSchema(schemas)
  return ajv
}

function parameterSchema(listed: readonly RawParameter[], place: ParameterPlace) {
  const parameters = listed.filter((parameter) => parameter.in === place)
  const nameOf = (name: string) => (place === 'header' ? name.toLowerCase() : name)
  return {
    type: 'object',
    // Of the headers only those that the contract names are handed to the check.
    additionalProperties: false,
    required: parameters.filter(({ required }) => required).map(({ name }) => nameOf(name)),
    properties: Object.fromEntries(parameters.map(({ name, schema }) => [nameOf(name), absolute(schema)])),
  }
}

/** The schema with its references made to point into the document from outside it. */
function absolute(schema: unknown): unknown {
  return JSON.parse(JSON.stringify(schema).replaceAll('"$ref":"#', `"$ref":"${documentId}#`)) as unknown
}

function bodyValidator(ajv: Ajv2020, schema: string, discriminator: { propertyName: string; mapping: Record<string, string> } | undefined): Check {
  if (!discriminator) return checkWith(ajv.compile({ $ref: schema }))
  const { propertyName, mapping } = discriminator
  const branches = new Map(Object.entries(mapping).map(([value, ref]) => [value, checkWith(ajv.compile({ $ref: documentId + ref }))]))
  const kind = checkWith(ajv.compile({ type: 'object', required: [propertyName], properties: { [propertyName]: { enum: [...branches.keys()] } } }))
  return (value) => {
    const errors = kind(value)
    return errors.length > 0 ? errors : branches.get((value as Record<string, string>)[propertyName]!)!(value)
  }
}

function checkWith(validate: ValidateFunction): Check {
  return (value) => (validate(value) ? [] : (validate.errors ?? []))
}

function isSmall(value: unknown): boolean {
  return JSON.stringify(value).length <= 4_096
}

function resolve(document: RawDocument, value: { $ref?: string } | undefined): unknown {
  if (value?.$ref === undefined) return value
  return value.$ref.slice(2).split('/').reduce<unknown>((node, key) => (node as Record<string, unknown>)[key], document)
}

function escapePointer(segment: string): string {
  return encodeURIComponent(segment.replaceAll('~', '~0').replaceAll('/', '~1'))
}

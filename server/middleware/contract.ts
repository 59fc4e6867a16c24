import type { Request, RequestHandler, Response } from 'express'
import { Refusal } from '../../shared/contract/problems.ts'
import type { Fault } from '../../shared/contract/problems.ts'
import type { operations } from '../../shared/contract/openapi.generated.ts'
import { requireAction } from '../services/permissions.ts'
import type { Caller } from '../services/permissions.ts'
import type { ContractDocument, Operation, OperationId } from './contract-document.ts'
import { faultOf } from './fault-text.ts'
import { parseJson, readBody } from './request-body.ts'

type Get<T, K extends PropertyKey> = T extends { [P in K]?: infer V } ? (Exclude<V, undefined> extends never ? Record<string, never> : Exclude<V, undefined>) : Record<string, never>
type Parameters<Id extends OperationId, Place extends string> = Get<operations[Id]['parameters'], Place>
type JsonBody<Id extends OperationId> = operations[Id] extends { requestBody: { content: { 'application/json': infer Body } } } ? Body : undefined

/** A request that fits the contract: defaults filled in, numbers and booleans of the query made so. */
export interface Input<Id extends OperationId> {
  readonly caller: Caller
  readonly path: Parameters<Id, 'path'>
  readonly query: Parameters<Id, 'query'>
  /** Names in small letters. */
  readonly header: { [K in keyof Parameters<Id, 'header'> as Lowercase<string & K>]: Parameters<Id, 'header'>[K] }
  readonly body: JsonBody<Id>
  readonly requestId: string
}

declare global {
  // eslint-disable-next-line @typescript-eslint/no-namespace
  namespace Express {
    interface Request {
      input?: { path: unknown; query: unknown; header: unknown; body: unknown }
      operation?: Operation
    }
  }
}

export interface OperationOptions {
  /** Largest JSON body; 1 MiB unless given. */
  bodyBytes?: number
  /** The answer holds a secret: it is not kept for a repeated Idempotency-Key. */
  answersSecret?: boolean
}

export interface Contract {
  readonly document: ContractDocument
  /**
   * What stands before the handler of an operation: who asks, CSRF, the operation's x-action, limits, parameters, body,
   * Idempotency-Key. Bodies that are not JSON are left to the handler unread.
   */
  operation(id: OperationId, options?: OperationOptions): RequestHandler[]
  /** The same, with the handler, which gets the validated input. */
  handle<Id extends OperationId>(id: Id, handler: (input: Input<Id>, res: Response, req: Request) => unknown, options?: OperationOptions): RequestHandler[]
}

export interface ContractSteps {
  document: ContractDocument
  authenticate: RequestHandler
  protectFromForgery: RequestHandler
  limitCaller: RequestHandler
  repeatSafely: (options: { keepsAnswer: boolean }) => RequestHandler
}

const defaultBodyBytes = 1024 * 1024

export function createContract({ document, authenticate, protectFromForgery, limitCaller, repeatSafely }: ContractSteps): Contract {
  function chain(id: OperationId, { bodyBytes = defaultBodyBytes, answersSecret = false }: OperationOptions = {}): RequestHandler[] {
    const operation = document.operation(id)
    const isOpen = operation.action === 'anyone'
    const changes = operation.method !== 'get'
    const begin: RequestHandler = (req, res, next) => {
      req.operation = operation
      res.setHeader('Cache-Control', 'no-store')
      if (operation.answerTypes.length > 0 && !req.accepts([...operation.answerTypes, 'application/problem+json'])) throw notAcceptable(req, operation)
      next()
    }
    return [
      begin,
      ...(isOpen ? [] : [authenticate]),
      ...(isOpen || !changes ? [] : [onlyForSessions(protectFromForgery)]),
      ...(isOpen ? [] : [limitCaller, permit(operation)]),
      validate(document, operation, bodyBytes),
      ...(operation.takesIdempotencyKey ? [repeatSafely({ keepsAnswer: !answersSecret })] : []),
    ]
  }

  return {
    document,
    operation: chain,
    handle: (id, handler, options) => [...chain(id, options), async (req, res) => void (await handler(inputOf(req), res, req))],
  }
}

/** The validated input of a request that came through `operation`. */
export function inputOf<Id extends OperationId>(req: Request): Input<Id> {
  return { ...req.input, caller: req.caller, requestId: req.requestId } as Input<Id>
}

function onlyForSessions(handler: RequestHandler): RequestHandler {
  return (req, res, next) => (req.caller?.kind === 'person' ? handler(req, res, next) : next())
}

function permit(operation: Operation): RequestHandler {
  return (req, _res, next) => {
    const caller = req.caller!
    if (caller.kind === 'person' && !operation.takesSession) {
      throw new Refusal('role-not-allowed', 'Only a key may do this, with itself as the Authorization header.')
    }
    if (caller.kind === 'key' && !operation.takesKey) {
      throw new Refusal('insufficient-scope', 'No key may do this, only people signed in to the console.', {
        headers: { 'WWW-Authenticate': 'Bearer realm="heftwise", error="insufficient_scope"' },
      })
    }
    if (operation.action !== 'anyone') requireAction(caller, operation.action)
    next()
  }
}

function validate(document: ContractDocument, operation: Operation, bodyBytes: number): RequestHandler {
  const headerNames = document.parameterNames(operation.id, 'header')

  return async (req, _res, next) => {
    const path = { ...req.params }
    const pathFaults = document.parameterCheck(operation.id, 'path')(path).map(faultOf)
    if (pathFaults.length > 0) throw new Refusal('not-found', `The path cannot name anything here. ${summary(pathFaults)}`, { errors: parameterFaults(pathFaults) })

    const query: Record<string, unknown> = { ...req.query }
    const header = Object.fromEntries(headerNames.filter((name) => req.headers[name] !== undefined).map((name) => [name, req.headers[name]]))
    const faults = [...document.parameterCheck(operation.id, 'query')(query), ...document.parameterCheck(operation.id, 'header')(header)].map(faultOf)
    if (faults.length > 0) throw new Refusal('invalid-request', summary(parameterFaults(faults)), { errors: parameterFaults(faults) })

    let body: unknown
    if (operation.bodyTypes.length > 0) {
      const type = mediaTypeOf(req)
      if (!operation.bodyTypes.includes(type)) throw unsupported(type, operation.bodyTypes)
      if (type === 'application/json') {
        body = parseJson(await readBody(req, bodyBytes))
        const bodyFaults = document.bodyCheck(operation.id, type)(body).slice(0, 20).map(faultOf)
        if (bodyFaults.length > 0) throw new Refusal('invalid-request', summary(bodyFaults), { errors: bodyFaults })
      }
    }
    req.input = { path, query, header, body }
    next()
  }
}

function parameterFaults(faults: readonly Fault[]): Fault[] {
  return faults.map((fault) => ({ ...fault, pointer: fault.pointer?.replace(/^\//, '') }))
}

function summary(faults: readonly Fault[]): string {
  const [first] = faults
  const place = first?.pointer ? `${first.pointer.replace(/^\//, '').replaceAll('/', '.')}: ` : ''
  const more = faults.length > 1 ? ` And ${faults.length - 1} more; see errors.` : ''
  return `${place}${first?.detail ?? ''}${more}`
}

export function mediaTypeOf(req: Request): string {
  return (req.headers['content-type'] ?? '').split(';', 1)[0]!.trim().toLowerCase()
}

function unsupported(type: string, taken: readonly string[]): Refusal {
  const found = type === '' ? 'There is no Content-Type' : `Content-Type is "${type.slice(0, 80)}"`
  return new Refusal('unsupported-media-type', `${found}; this route takes ${taken.join(' or ')}.`, { headers: { Accept: taken.join(', ') } })
}

function notAcceptable(req: Request, { answerTypes }: Operation): Refusal {
  return new Refusal('not-acceptable', `Accept is "${String(req.headers.accept).slice(0, 120)}"; this route answers ${answerTypes.join(' or ')}.`)
}

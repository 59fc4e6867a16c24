import { hash } from 'node:crypto'
import type { IncomingMessage, ServerResponse } from 'node:http'
import { Router } from 'express'
import type { ErrorRequestHandler, Request, RequestHandler, Response } from 'express'
import { Refusal } from '../../../shared/contract/problems.ts'
import type { Dependencies } from '../../dependencies.ts'
import type { Services } from '../../services/index.ts'
import type { ServedVersion } from '../../services/live-versions.ts'
import { requireAction } from '../../services/permissions.ts'
import type { Action, Caller } from '../../services/permissions.ts'
import { serveOrForward } from '../forward.ts'
import { answerBatch, answerPrediction } from './answers.ts'
import type { Predicted } from './answers.ts'
import { readHotBody } from './body.ts'
import { parseBody, sentFormat, wantedFormat } from './formats.ts'
import type { Format } from './formats.ts'
import { HotLimit } from './rate-limit.ts'
import { bodyObject, readAdaptedPredict, readBatch, readPredict, readVersionNumber, StatesRoom } from './requests.ts'
import type { Body } from './requests.ts'

const directPath = /^\/v1\/(?:models\/([a-z0-9-]{1,64})\/predict|adaptations\/([0-9a-f-]{36})\/(predict|batches))$/
const soundName = /^[a-z0-9]([a-z0-9-]{0,62}[a-z0-9])?$/
const soundId = /^[0-9a-f]{8}(-[0-9a-f]{4}){3}-[0-9a-f]{12}$/i

export interface HotRoutes {
  readonly router: Router
  /**
   * Serves a request of the usual kind without Express, which alone costs as much as all the rest of a one-row predict: one
   * of the three paths, a sound key, a plain Accept. Mistakes are answered by `onError`.
   *
   * @returns false: untouched, for the router to take
   */
  direct(req: IncomingMessage, res: ServerResponse, context: RequestHandler, onError: ErrorRequestHandler): boolean
}

const plainAccepts = new Set<string | undefined>([undefined, '*/*', 'application/json', 'application/cbor'])

interface HotRequest {
  readonly caller: Caller
  readonly raw: Buffer
  readonly body: Body
  readonly wanted: Format
}

/**
 * predict, predictAdapted and batches, in a chain of their own before all other middleware: what controllers call all day
 * must not pay for what consoles need. Nothing here asks the database unless something is not in memory yet.
 */
export function hotRoutes(
  { keys, changeFeed, settings }: Dependencies,
  { liveVersions, predictions, adaptations }: Services,
  { authenticate, protectFromForgery }: { authenticate: RequestHandler; protectFromForgery: RequestHandler },
): HotRoutes {
  const router = Router()
  const room = new StatesRoom()
  const adaptedVersions = new WeakMap<object, Predicted>()

  /** The key of a request that carries one, looked up in memory. */
  function keyOf(req: Request): Caller | undefined {
    const { authorization } = req.headers
    if (authorization === undefined || !authorization.startsWith('Bearer ')) return undefined
    return keys.find(sha256(authorization.slice(7)))?.caller
  }

  /** Whoever comes without a sound key takes the way of everybody else: to a session, or to the refusal that fits. */
  const identifyOther = (req: Request, res: Response): Promise<Caller> =>
    new Promise((resolve, reject) => {
      const settle = (error?: unknown) => (error ? reject(error) : resolve(req.caller as Caller))
      authenticate(req, res, (error?: unknown) => {
        if (error || req.caller?.kind !== 'person') settle(error)
        else protectFromForgery(req, res, settle)
      })
    })

  /** One function for the whole chain: each of Express's layers costs a one-row predict a tenth of its time. */
  function chain(action: Action, limit: HotLimit, serve: (req: Request, res: Response, hot: HotRequest) => Promise<void> | void): RequestHandler {
    return async (req, res) => {
      res.setHeader('Cache-Control', 'no-store')
      res.setHeader('X-Content-Type-Options', 'nosniff')
      const caller = (req.caller ??= keyOf(req) ?? (await identifyOther(req, res)))
      limit.count(res, caller)
      requireAction(caller, action)
      if (!changeFeed.isCurrent()) await changeFeed.ensureCurrent()
      const sent = sentFormat(req)
      const wanted = wantedFormat(req, sent)
      const raw = await readHotBody(req)
      return serve(req, res, { caller, raw, wanted, body: bodyObject(parseBody(sent, raw)) })
    }
  }

  function predict(req: Request, res: Response, { caller, body, wanted }: HotRequest): Promise<void> | void {
    const { model } = req.params as { model: string }
    if (!soundName.test(model)) throw new Refusal('not-found', 'The path names no model: names are small letters, digits and hyphens.')
    const found = liveVersions.get(caller.teamId, model, readVersionNumber(body))
    const answer = (served: ServedVersion): void => {
      const states = readPredict(body, served.arm, room)
      answerPrediction(res, wanted, served, states.joints, states.rows, predictions.ofVersion(served, states))
    }
    return found instanceof Promise ? found.then(answer) : answer(found)
  }

  function predictAdapted(req: Request, res: Response, { caller, body, raw, wanted }: HotRequest): Promise<void> {
    const id = adaptationId(req)
    return serveOrForward(adaptations, req, res, raw, () =>
      adaptations.predict(caller, id, (arm) => readAdaptedPredict(body, arm, room), (query, prediction, state) => {
        const { record } = state
        let of = adaptedVersions.get(record)
        if (of === undefined) adaptedVersions.set(record, (of = { model: record.model, version: record.version, arm: record.arm }))
        answerPrediction(res, wanted, of, query.joints, query.rows, prediction, state)
      }))
  }

  function postBatch(req: Request, res: Response, { caller, body, raw, wanted }: HotRequest): Promise<void> {
    const id = adaptationId(req)
    return serveOrForward(adaptations, req, res, raw, async () => {
      const { batch, result, record } = await adaptations.postBatch(caller, id, (arm) => readBatch(body, arm))
      answerBatch(res, wanted, result, record.arm, batch.joints)
    })
  }

  const predicts = new HotLimit('predict', settings.limits.hotRequestsPerMinute)
  const batches = new HotLimit('batches', settings.limits.hotRequestsPerMinute)
  const onModel = chain('predict', predicts, predict)
  const onAdaptation = { predict: chain('predict', predicts, predictAdapted), batches: chain('post_batches', batches, postBatch) }
  router.post('/v1/models/:model/predict', onModel)
  router.post('/v1/adaptations/:adaptation/predict', onAdaptation.predict)
  router.post('/v1/adaptations/:adaptation/batches', onAdaptation.batches)

  const direct: HotRoutes['direct'] = (incoming, outgoing, context, onError) => {
    const found = incoming.method === 'POST' ? directPath.exec(incoming.url as string) : null
    if (found === null || !plainAccepts.has(incoming.headers.accept)) return false
    const req = incoming as Request
    const res = outgoing as Response
    const caller = keyOf(req)
    if (caller === undefined) return false
    const [, model, adaptation, what] = found
    req.caller = caller
    req.params = model === undefined ? { adaptation } : { model }
    context(req, res, () => undefined)
    const serve = model === undefined ? onAdaptation[what as keyof typeof onAdaptation] : onModel
    void (serve(req, res, () => undefined) as Promise<void>).catch((error: unknown) => void onError(error, req, res, () => void res.destroy()))
    return true
  }
  return { direct, router }
}

function adaptationId(req: Request): string {
  const { adaptation } = req.params as { adaptation: string }
  if (!soundId.test(adaptation)) throw new Refusal('not-found', 'The path names no adaptation: ids look like 0193a5c2-7d1e-7cc0-a1b2-3c4d5e6f7081.')
  return adaptation.toLowerCase()
}

function sha256(secret: string): Buffer {
  return hash('sha256', secret, 'buffer')
}

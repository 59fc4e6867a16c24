import { hash } from 'node:crypto'
import { Router } from 'express'
import type { Request, RequestHandler, Response } from 'express'
import { Refusal } from '../../../shared/contract/problems.ts'
import type { Dependencies } from '../../dependencies.ts'
import { callerLimiter } from '../../middleware/limits.ts'
import { readBody } from '../../middleware/request-body.ts'
import type { Services } from '../../services/index.ts'
import { requireAction } from '../../services/permissions.ts'
import type { Action, Caller } from '../../services/permissions.ts'
import { serveOrForward } from '../forward.ts'
import { answerBatch, answerPrediction } from './answers.ts'
import type { Predicted } from './answers.ts'
import { parseBody, sentFormat, wantedFormat } from './formats.ts'
import type { Format } from './formats.ts'
import { bodyObject, readAdaptedPredict, readBatch, readPredict, readVersionNumber, StatesRoom } from './requests.ts'
import type { Body } from './requests.ts'

const mostBytes = 4 << 20
const soundName = /^[a-z0-9]([a-z0-9-]{0,62}[a-z0-9])?$/
const soundId = /^[0-9a-f]{8}(-[0-9a-f]{4}){3}-[0-9a-f]{12}$/i

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
): Router {
  const router = Router()
  const room = new StatesRoom()
  const adaptedVersions = new WeakMap<object, Predicted>()

  /** Keys are looked up in memory; whoever comes otherwise takes the way of everybody else. */
  const identify: RequestHandler = (req, res, next) => {
    const { authorization } = req.headers
    if (authorization !== undefined && authorization.startsWith('Bearer ')) {
      const entry = keys.find(sha256(authorization.slice(7)))
      if (entry !== undefined) {
        req.caller = entry.caller
        return next()
      }
    }
    authenticate(req, res, (error?: unknown) => {
      if (error) next(error)
      else if (req.caller?.kind === 'person') protectFromForgery(req, res, next)
      else next()
    })
  }

  /** Who asks, may they, and what they sent. */
  async function receive(req: Request, action: Action): Promise<HotRequest> {
    const caller = req.caller as Caller
    requireAction(caller, action)
    if (!changeFeed.isCurrent()) await changeFeed.ensureCurrent()
    const sent = sentFormat(req)
    const wanted = wantedFormat(req, sent)
    const raw = await readBody(req, mostBytes)
    return { caller, raw, body: bodyObject(parseBody(sent, raw)), wanted }
  }

  async function predict(req: Request, res: Response): Promise<void> {
    const { caller, body, wanted } = await receive(req, 'predict')
    const { model } = req.params as { model: string }
    if (!soundName.test(model)) throw new Refusal('not-found', 'The path names no model: names are small letters, digits and hyphens.')
    const found = liveVersions.get(caller.teamId, model, readVersionNumber(body))
    const served = found instanceof Promise ? await found : found
    const states = readPredict(body, served.arm, room)
    const prediction = predictions.ofVersion(served, states)
    answerPrediction(res, wanted, served, states.joints, states.rows, prediction)
  }

  async function predictAdapted(req: Request, res: Response): Promise<void> {
    const { caller, body, raw, wanted } = await receive(req, 'predict')
    const id = adaptationId(req)
    await serveOrForward(adaptations, req, res, raw, () =>
      adaptations.predict(caller, id, (arm) => readAdaptedPredict(body, arm, room), (query, prediction, state) => {
        const { record } = state
        let of = adaptedVersions.get(record)
        if (of === undefined) adaptedVersions.set(record, (of = { model: record.model, version: record.version, arm: record.arm }))
        answerPrediction(res, wanted, of, query.joints, query.rows, prediction, state)
      }))
  }

  async function postBatch(req: Request, res: Response): Promise<void> {
    const { caller, body, raw, wanted } = await receive(req, 'post_batches')
    const id = adaptationId(req)
    await serveOrForward(adaptations, req, res, raw, async () => {
      const { batch, result, record } = await adaptations.postBatch(caller, id, (arm) => readBatch(body, arm))
      answerBatch(res, wanted, result, record.arm, batch.joints)
    })
  }

  const limitPredicts = callerLimiter('predict', settings.limits.hotRequestsPerMinute)
  const limitBatches = callerLimiter('batches', settings.limits.hotRequestsPerMinute)
  router.post('/v1/models/:model/predict', begin, identify, limitPredicts, predict)
  router.post('/v1/adaptations/:adaptation/predict', begin, identify, limitPredicts, predictAdapted)
  router.post('/v1/adaptations/:adaptation/batches', begin, identify, limitBatches, postBatch)
  return router
}

const begin: RequestHandler = (_req, res, next) => {
  res.setHeader('Cache-Control', 'no-store')
  res.setHeader('X-Content-Type-Options', 'nosniff')
  next()
}

function adaptationId(req: Request): string {
  const { adaptation } = req.params as { adaptation: string }
  if (!soundId.test(adaptation)) throw new Refusal('not-found', 'The path names no adaptation: ids look like 0193a5c2-7d1e-7cc0-a1b2-3c4d5e6f7081.')
  return adaptation.toLowerCase()
}

function sha256(secret: string): Buffer {
  return hash('sha256', secret, 'buffer')
}

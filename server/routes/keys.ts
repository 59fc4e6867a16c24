import { Router } from 'express'
import type { Contract } from '../middleware/contract.ts'
import { answerPage } from '../middleware/page-answer.ts'
import type { Services } from '../services/index.ts'

export function keyRoutes({ keys }: Services, contract: Contract): Router {
  const router = Router()

  router.get('/v1/keys', contract.handle('listKeys', async ({ caller, query }, res, req) => {
    answerPage(req, res, await keys.list(caller, { cursor: query.cursor, limit: query.limit!, state: query.state }))
  }))

  router.post('/v1/keys', contract.handle('createKey', async ({ caller, body, requestId }, res) => {
    const expiresAt = body.expires_at === undefined ? undefined : new Date(body.expires_at)
    const made = await keys.create(caller, { name: body.name, scopes: body.scopes, expiresAt }, requestId)
    res.status(201).location(`/v1/keys/${made.key.id}`).json(made)
  }, { answersSecret: true }))

  router.post('/v1/keys/current/rotate', contract.handle('rotateCurrentKey', async ({ caller, body, requestId }, res) => {
    res.json(await keys.rotateCurrent(caller, body.overlap_seconds!, requestId))
  }))

  router.get('/v1/keys/:key', contract.handle('getKey', async ({ caller, path }, res) => {
    res.json(await keys.get(caller, path.key))
  }))

  router.post('/v1/keys/:key/revoke', contract.handle('revokeKey', async ({ caller, path, body, requestId }, res) => {
    res.json(await keys.revoke(caller, path.key, body.reason, requestId))
  }))

  router.post('/v1/keys/:key/rotate', contract.handle('rotateKey', async ({ caller, path, body, requestId }, res) => {
    res.json(await keys.rotate(caller, path.key, body.overlap_seconds!, requestId))
  }))

  return router
}

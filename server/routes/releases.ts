import { Router, type Response } from 'express'
import type { components } from '../../shared/contract/openapi.generated.ts'
import type { Contract } from '../middleware/contract.ts'
import { answerPage } from '../middleware/page-answer.ts'
import type { Services } from '../services/index.ts'
import type { Released, ReleaseRecord } from '../services/releases.ts'

export function releaseRoutes({ releases }: Services, contract: Contract): Router {
  const router = Router()

  router.get(
    '/v1/models/:model/releases',
    contract.handle('listReleases', async ({ caller, path, query }, res, req) => {
      const { etag, ...page } = await releases.list(caller, path.model, { cursor: query.cursor, limit: query.limit! })
      res.setHeader('ETag', etag)
      answerPage(req, res, { ...page, items: page.items.map(releaseToWire) })
    }),
  )

  router.post(
    '/v1/models/:model/releases',
    contract.handle('releaseVersion', async ({ caller, path, header, body, requestId }, res) => {
      answer(res, await releases.release(caller, path.model, { ...body, ifMatch: header['if-match'] }, requestId))
    }),
  )

  router.post(
    '/v1/models/:model/rollback',
    contract.handle('rollBack', async ({ caller, path, header, body, requestId }, res) => {
      answer(res, await releases.rollBack(caller, path.model, { ...body, ifMatch: header['if-match'] }, requestId))
    }),
  )

  return router
}

function answer(res: Response, { release, etag }: Released): void {
  res.status(201).setHeader('ETag', etag)
  res.json(releaseToWire(release))
}

function releaseToWire({
  number,
  kind,
  version,
  previousVersion,
  reason,
  at,
  by,
}: ReleaseRecord): components['schemas']['Release'] {
  return { number, kind, version, previous_version: previousVersion, reason, at: at.toISOString(), by }
}

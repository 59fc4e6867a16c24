import { Router } from 'express'
import type { components } from '../../shared/contract/openapi.generated.ts'
import type { Contract } from '../middleware/contract.ts'
import { answerUnlessKnown } from '../middleware/entity-tag.ts'
import { answerPage } from '../middleware/page-answer.ts'
import type { Services } from '../services/index.ts'
import { modelEtag, type ModelRecord } from '../services/models.ts'
import { metricsFromWire, snapshotToJson, versionToJson } from './version-wire.ts'

/** A version's parameters as base64; the largest network that a fitting makes has 8 MB of them. */
const SNAPSHOT_BYTES = 16 * 1024 * 1024

export function modelRoutes({ models, versions }: Services, contract: Contract): Router {
  const router = Router()

  router.get(
    '/v1/models',
    contract.handle('listModels', async ({ caller, query }, res, req) => {
      const page = await models.list(caller, {
        cursor: query.cursor,
        limit: query.limit!,
        archived: query.archived,
        arm: query.arm,
      })
      answerPage(req, res, { ...page, items: page.items.map(modelToWire) })
    }),
  )

  router.post(
    '/v1/models',
    contract.handle('createModel', async ({ caller, body, requestId }, res) => {
      const model = await models.create(caller, body, requestId)
      res.status(201).location(`/v1/models/${model.name}`).json(modelToWire(model))
    }),
  )

  router.get(
    '/v1/models/:model',
    contract.handle('getModel', async ({ caller, path }, res) => {
      const model = await models.get(caller, path.model)
      res.setHeader('ETag', modelEtag(model))
      res.json(modelToWire(model))
    }),
  )

  router.post(
    '/v1/models/:model/archive',
    contract.handle('archiveModel', async ({ caller, path, body, requestId }, res) => {
      res.json(modelToWire(await models.archive(caller, path.model, body.reason, requestId)))
    }),
  )

  router.get(
    '/v1/models/:model/versions',
    contract.handle('listVersions', async ({ caller, path, query }, res, req) => {
      const page = await versions.list(caller, path.model, { cursor: query.cursor, limit: query.limit! })
      answerPage(req, res, { ...page, items: page.items.map(versionToJson) })
    }),
  )

  router.post(
    '/v1/models/:model/versions',
    contract.handle(
      'importVersion',
      async ({ caller, path, body, requestId }, res) => {
        const version = await versions.import(
          caller,
          path.model,
          {
            jointNames: body.joint_names,
            unit: body.unit,
            description: body.description,
            parameters: body.parameters,
            checksum: body.checksum,
            metrics: metricsFromWire(body.metrics),
          },
          requestId,
        )
        res.status(201).location(`/v1/models/${version.model}/versions/${version.version}`).json(versionToJson(version))
      },
      { bodyBytes: SNAPSHOT_BYTES },
    ),
  )

  router.get(
    '/v1/models/:model/versions/:version',
    contract.handle('getVersion', async ({ caller, path }, res) => {
      res.json(versionToJson(await versions.get(caller, path.model, path.version)))
    }),
  )

  router.get(
    '/v1/models/:model/versions/:version/snapshot',
    contract.handle('getVersionSnapshot', async ({ caller, path }, res, req) => {
      const snapshot = await versions.snapshot(caller, path.model, path.version)
      answerUnlessKnown(req, res, snapshot.checksum, () => snapshotToJson(snapshot))
    }),
  )

  return router
}

function modelToWire(model: ModelRecord): components['schemas']['Model'] {
  return {
    id: model.id,
    name: model.name,
    arm: model.arm,
    description: model.description,
    live_version: model.liveVersion,
    live_since: model.liveSince?.toISOString() ?? null,
    newest_version: model.newestVersion,
    archived_at: model.archivedAt?.toISOString() ?? null,
    created_at: model.createdAt.toISOString(),
    created_by: model.createdBy,
  }
}

import { Router } from 'express'
import type { components } from '../../shared/contract/openapi.generated.ts'
import { lossToWire } from '../../shared/contract/snapshots.ts'
import type { Contract } from '../middleware/contract.ts'
import { answerUnlessKnown } from '../middleware/entity-tag.ts'
import { answerPage } from '../middleware/page-answer.ts'
import type { StoredComparison } from '../models/loss-version.ts'
import type { Services } from '../services/index.ts'
import type { LossRecord, LossVersionRecord, LossWithArtefact } from '../services/losses.ts'
import { storedUpdateToWire } from './version-wire.ts'

type Schemas = components['schemas']

export function lossRoutes({ losses }: Services, contract: Contract): Router {
  const router = Router()

  router.get(
    '/v1/losses',
    contract.handle('listLosses', async ({ caller, query }, res, req) => {
      const page = await losses.list(caller, { cursor: query.cursor, limit: query.limit!, model: query.model })
      answerPage(req, res, { ...page, items: page.items.map(lossRecordToWire) })
    }),
  )

  router.post(
    '/v1/losses',
    contract.handle('createLoss', async ({ caller, body, requestId }, res) => {
      const loss = await losses.create(caller, body, requestId)
      res.status(201).location(`/v1/losses/${loss.name}`).json(lossRecordToWire(loss))
    }),
  )

  router.get(
    '/v1/losses/:loss',
    contract.handle('getLoss', async ({ caller, path }, res) => {
      res.json(lossRecordToWire(await losses.get(caller, path.loss)))
    }),
  )

  router.get(
    '/v1/losses/:loss/versions',
    contract.handle('listLossVersions', async ({ caller, path, query }, res, req) => {
      const page = await losses.versions(caller, path.loss, { cursor: query.cursor, limit: query.limit! })
      answerPage(req, res, { ...page, items: page.items.map(lossVersionToWire) })
    }),
  )

  router.post(
    '/v1/losses/:loss/versions',
    contract.handle('importLossVersion', async ({ caller, path, body, requestId }, res) => {
      const { checksum, validation = [], ...loss } = body
      const version = await losses.import(
        caller,
        path.loss,
        { loss, checksum, validation: validation.map(comparisonOf) },
        requestId,
      )
      res.status(201).location(`/v1/losses/${version.loss}/versions/${version.version}`).json(lossVersionToWire(version))
    }),
  )

  router.get(
    '/v1/losses/:loss/versions/:version',
    contract.handle('getLossVersion', async ({ caller, path }, res) => {
      res.json(lossVersionToWire(await losses.version(caller, path.loss, path.version)))
    }),
  )

  router.get(
    '/v1/losses/:loss/versions/:version/snapshot',
    contract.handle('getLossSnapshot', async ({ caller, path }, res, req) => {
      const snapshot = await losses.snapshot(caller, path.loss, path.version)
      answerUnlessKnown(req, res, snapshot.checksum, () => lossSnapshotToWire(snapshot))
    }),
  )

  return router
}

function lossRecordToWire(loss: LossRecord): Schemas['Loss'] {
  return {
    id: loss.id,
    name: loss.name,
    model: loss.model,
    kind: loss.kind,
    description: loss.description,
    newest_version: loss.newestVersion,
    created_at: loss.createdAt.toISOString(),
    created_by: loss.createdBy,
  }
}

function lossVersionToWire(version: LossVersionRecord): Schemas['LossVersion'] {
  return {
    loss: version.loss,
    version: version.version,
    kind: version.kind,
    base_version: version.baseVersion,
    base_checksum: version.baseChecksum,
    scheme: version.scheme,
    update: storedUpdateToWire(version.scheme, version.update),
    checksum: version.checksum,
    origin: version.origin,
    validation: version.validation.map(comparisonOf),
    created_at: version.createdAt.toISOString(),
    created_by: version.createdBy,
  }
}

function lossSnapshotToWire({ artefact, checksum, validation }: LossWithArtefact): Schemas['LossSnapshot'] {
  return { format: 'heftwise-loss-1', ...lossToWire(artefact), checksum, validation: validation.map(comparisonOf) }
}

function comparisonOf({ name, error, rate }: StoredComparison): Schemas['LossComparison'] {
  return rate === undefined ? { name, error } : { name, error, rate }
}

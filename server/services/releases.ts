import { Op } from 'sequelize'
import type { Transaction } from 'sequelize'
import { Refusal } from '../../shared/contract/problems.ts'
import { uuid7 } from '../database/uuid7.ts'
import type { Dependencies } from '../dependencies.ts'
import type { Release } from '../models/release.ts'
import { decodeCursor, pageOf, type Page, type PageRequest } from './page.ts'
import { findModel, requireModelInUse, type ModelWithArm } from './model-records.ts'
import { modelEtag, modelRecord, requireReleaseMatch } from './models.ts'
import { callerLabel, requireAction, type Caller } from './permissions.ts'

export interface ReleaseRecord {
  readonly number: number
  readonly kind: 'release' | 'rollback'
  readonly version: number
  readonly previousVersion: number | null
  readonly reason: string
  readonly at: Date
  readonly by: string
}

/** `etag` is the model's afterwards. */
export interface Released {
  readonly release: ReleaseRecord
  readonly etag: string
}

export interface ReleaseService {
  release(
    caller: Caller,
    model: string,
    given: { version: number; reason: string; ifMatch?: string },
    requestId?: string,
  ): Promise<Released>
  rollBack(
    caller: Caller,
    model: string,
    given: { to?: number; reason: string; ifMatch?: string },
    requestId?: string,
  ): Promise<Released>
  list(caller: Caller, model: string, page: PageRequest): Promise<Page<ReleaseRecord> & { etag: string }>
}

export function createReleaseService({ database, clock, audit, changeFeed }: Dependencies): ReleaseService {
  const { Model, Release, Version } = database.models

  async function requireVersion(model: ModelWithArm, number: number, transaction: Transaction): Promise<void> {
    const found = await Version.count({ where: { modelId: model.id, number }, transaction })
    if (found === 0) {
      const newest = model.newestVersion ?? null
      throw new Refusal(
        'not-found',
        `Model "${model.name}" has no version ${number}; ` +
        `${newest === null ? 'it has none yet. Fit or import one.' : `its newest is ${newest}.`}`,
      )
    }
  }

  /** Makes a version live. The model's row is locked by the caller, so numbers have no gaps and nobody wins twice. */
  async function makeLive(
    caller: Caller,
    model: ModelWithArm,
    kind: Release['kind'],
    version: number,
    reason: string,
    requestId: string | undefined,
    transaction: Transaction,
  ): Promise<Released> {
    const at = clock.now()
    const previousVersion = model.liveVersion ?? null
    const number = (model.releaseCount ?? 0) + 1
    const release = await Release.create(
      {
        id: uuid7(),
        teamId: caller.teamId,
        modelId: model.id,
        number,
        kind,
        version,
        previousVersion,
        reason,
        createdAt: at,
        createdBy: callerLabel(caller),
      },
      { transaction },
    )
    await Model.update({ liveVersion: version, liveSince: at, releaseCount: number }, { where: { id: model.id }, transaction })
    await audit.record(transaction, {
      by: caller,
      action: kind === 'release' ? 'model.release' : 'model.roll_back',
      subject: { kind: 'model', id: model.id, name: model.name },
      before: { liveVersion: previousVersion },
      after: { liveVersion: version, number },
      reason,
      requestId,
    })
    await changeFeed.announce(transaction, { kind: 'release', teamId: caller.teamId, subject: model.id })
    return { release: recordOf(release), etag: modelEtag({ ...modelRecord(model), releaseCount: number }) }
  }

  /** What was live before the live version was released: a version that was rolled back from is not gone back to unasked. */
  async function versionBefore(model: ModelWithArm, transaction: Transaction): Promise<number> {
    const released = await Release.findOne({
      where: { modelId: model.id, kind: 'release', version: model.liveVersion ?? 0 },
      order: [['number', 'DESC']],
      transaction,
    })
    if (released?.previousVersion) return released.previousVersion
    const live = model.liveVersion ?? null
    throw new Refusal(
      'nothing-to-roll-back-to',
      live === null
        ? `Model "${model.name}" has never had a live version. Release one.`
        : `No version of model "${model.name}" was live before version ${live}. ` +
          'Name one that was live with "to", or release another.',
    )
  }

  async function requireOnceLive(model: ModelWithArm, version: number, transaction: Transaction): Promise<void> {
    if ((await Release.count({ where: { modelId: model.id, version }, transaction })) > 0) return
    throw new Refusal(
      'nothing-to-roll-back-to',
      `Version ${version} of model "${model.name}" has never been live. Rolling back leads to versions that were; ` +
      'release it instead.',
    )
  }

  function refuseLive(model: ModelWithArm, version: number): void {
    if (model.liveVersion === version)
      throw new Refusal('already-live', `Version ${version} of model "${model.name}" is live already.`)
  }

  return {
    async release(caller, name, { version, reason, ifMatch }, requestId) {
      requireAction(caller, 'release')
      return database.transaction(async (transaction) => {
        const model = await findModel(database, caller.teamId, name, transaction)
        requireReleaseMatch(ifMatch, modelRecord(model))
        requireModelInUse(model)
        await requireVersion(model, version, transaction)
        refuseLive(model, version)
        return makeLive(caller, model, 'release', version, reason, requestId, transaction)
      })
    },

    async rollBack(caller, name, { to, reason, ifMatch }, requestId) {
      requireAction(caller, 'roll_back')
      return database.transaction(async (transaction) => {
        const model = await findModel(database, caller.teamId, name, transaction)
        requireReleaseMatch(ifMatch, modelRecord(model))
        const version = to ?? (await versionBefore(model, transaction))
        await requireVersion(model, version, transaction)
        refuseLive(model, version)
        await requireOnceLive(model, version, transaction)
        return makeLive(caller, model, 'rollback', version, reason, requestId, transaction)
      })
    },

    async list(caller, name, { cursor, limit }) {
      requireAction(caller, 'read_models')
      const model = await findModel(database, caller.teamId, name)
      const rows = await Release.findAll({
        where: {
          modelId: model.id,
          ...(cursor !== undefined && { number: { [Op.lt]: decodeCursor(cursor, 'number') } }),
        },
        order: [['number', 'DESC']],
        limit: limit + 1,
      })
      return { ...pageOf(rows, limit, ({ number }) => [number], recordOf), etag: modelEtag(modelRecord(model)) }
    },
  }
}

function recordOf({ number, kind, version, previousVersion, reason, createdAt, createdBy }: Release): ReleaseRecord {
  return { number, kind, version, previousVersion: previousVersion ?? null, reason, at: createdAt, by: createdBy }
}

import { Op, type Transaction } from 'sequelize'
import { Refusal } from '../../shared/contract/problems.ts'
import { lossFromWire, type WireLoss } from '../../shared/contract/snapshots.ts'
import {
  decodeLossVersion,
  encodeLossVersion,
  type LearnedLossKind,
  type LossVersion as LossArtefact,
} from '../../shared/dynamics/loss-version.ts'
import { duplicateKey } from '../database/connection.ts'
import { uuid7 } from '../database/uuid7.ts'
import type { Dependencies } from '../dependencies.ts'
import type { Loss } from '../models/loss.ts'
import type { LossVersion, StoredComparison } from '../models/loss-version.ts'
import type { Model } from '../models/model.ts'
import type { StoredUpdate, Version } from '../models/version.ts'
import { findModel, requireModelInUse } from './model-records.ts'
import { decodeCursor, pageOf, type Page, type PageRequest } from './page.ts'
import { callerLabel, requireAction, type Caller } from './permissions.ts'
import { checksumOf, readImport, requireChecksum } from './versions.ts'

export interface LossRecord {
  readonly id: string
  readonly name: string
  readonly model: string
  readonly kind: LearnedLossKind
  readonly description: string
  readonly newestVersion: number | null
  readonly createdAt: Date
  readonly createdBy: string
}

export interface LossVersionRecord {
  readonly loss: string
  readonly version: number
  readonly kind: LearnedLossKind
  readonly baseVersion: number
  readonly baseChecksum: string
  readonly scheme: LossVersion['scheme']
  readonly update: StoredUpdate
  readonly checksum: string
  readonly origin: LossVersion['origin']
  readonly validation: readonly StoredComparison[]
  readonly createdAt: Date
  readonly createdBy: string
}

export interface LossWithArtefact {
  readonly artefact: LossArtefact
  readonly checksum: string
  readonly validation: readonly StoredComparison[]
}

export interface NewLossVersion {
  readonly artefact: LossArtefact
  readonly base: Version
  readonly origin: LossVersion['origin']
  readonly validation: readonly StoredComparison[]
  readonly createdBy: string
}

export interface LossService {
  create(
    caller: Caller,
    given: { name: string; model: string; kind: LearnedLossKind | 'mse'; description?: string },
    requestId?: string,
  ): Promise<LossRecord>
  get(caller: Caller, name: string): Promise<LossRecord>
  list(caller: Caller, page: PageRequest & { model?: string }): Promise<Page<LossRecord>>
  versions(caller: Caller, name: string, page: PageRequest): Promise<Page<LossVersionRecord>>
  version(caller: Caller, name: string, version: number): Promise<LossVersionRecord>
  import(
    caller: Caller,
    name: string,
    given: { loss: WireLoss; checksum: string; validation: readonly StoredComparison[] },
    requestId?: string,
  ): Promise<LossVersionRecord>
  snapshot(caller: Caller, name: string, version: number): Promise<LossWithArtefact>
  /** Appends a loss version in the transaction of what made it. The loss's row must be locked in it. */
  add(
    transaction: Transaction,
    by: Caller | 'system',
    loss: LossWithModel,
    given: NewLossVersion,
    requestId?: string,
  ): Promise<LossVersionRecord>
  /** The team's loss, locked when a transaction is given. @throws {Refusal} not-found */
  find(teamId: string, name: string, transaction?: Transaction): Promise<LossWithModel>
}

export type LossWithModel = Loss & { model: Model }

export function createLossService({ database, clock, audit, changeFeed }: Dependencies): LossService {
  const { Loss, LossVersion, Model, Version } = database.models

  async function find(teamId: string, name: string, transaction?: Transaction): Promise<LossWithModel> {
    const loss = await Loss.findOne({
      where: { teamId, name },
      include: [{ model: Model, as: 'model', required: true }],
      ...(transaction && { transaction, lock: { level: transaction.LOCK.UPDATE, of: Loss } }),
    })
    if (!loss) throw new Refusal('not-found', `There is no loss called "${name}" in your team. GET /v1/losses lists them.`)
    return loss as LossWithModel
  }

  async function add(
    transaction: Transaction,
    by: Caller | 'system',
    loss: LossWithModel,
    { artefact, base, origin, validation, createdBy }: NewLossVersion,
    requestId?: string,
  ): Promise<LossVersionRecord> {
    const bytes = Buffer.from(encodeLossVersion(artefact))
    const number = (loss.newestVersion ?? 0) + 1
    const { scheme, update } = artefact.description
    const row = await LossVersion.create(
      {
        id: uuid7(),
        teamId: loss.teamId,
        lossId: loss.id,
        number,
        baseVersionId: base.id,
        baseVersion: base.number,
        baseChecksum: base.checksum,
        scheme,
        updateSettings: { ...update },
        artefact: bytes,
        checksum: checksumOf(bytes),
        origin,
        validation: [...validation],
        createdAt: clock.now(),
        createdBy,
      },
      { transaction },
    )
    await Loss.update({ newestVersion: number }, { where: { id: loss.id }, transaction })
    await audit.record(transaction, {
      by,
      teamId: loss.teamId,
      action: `loss_version.${origin.kind}`,
      subject: { kind: 'loss', id: loss.id, name: loss.name },
      after: { version: number, checksum: row.checksum, baseVersion: base.number, origin },
      requestId,
    })
    await changeFeed.announce(transaction, { kind: 'loss', teamId: loss.teamId, subject: loss.id })
    return versionRecordOf(loss, row)
  }

  return {
    find,
    add,

    async create(caller, given, requestId) {
      requireAction(caller, 'build')
      const { kind } = given
      if (kind === 'mse') {
        throw new Refusal(
          'setting-refused',
          'mse has nothing to learn, so it needs no loss: an adaptation names it as "loss": "mse". ' +
          'Choose structured, state_dependent or unstructured.',
          {
            errors: [{ pointer: '/kind', detail: 'mse is not learned.' }],
          },
        )
      }
      try {
        return await database.transaction(async (transaction) => {
          const model = await findModel(database, caller.teamId, given.model, transaction)
          requireModelInUse(model)
          const loss = await Loss.create(
            {
              id: uuid7(),
              teamId: caller.teamId,
              modelId: model.id,
              name: given.name,
              kind,
              description: given.description ?? '',
              createdAt: clock.now(),
              createdBy: callerLabel(caller),
            },
            { transaction },
          )
          await audit.record(transaction, {
            by: caller,
            action: 'loss.create',
            subject: { kind: 'loss', id: loss.id, name: loss.name },
            after: { name: loss.name, model: model.name, kind },
            requestId,
          })
          return recordOf(Object.assign(loss, { model }))
        })
      } catch (error) {
        if (duplicateKey(error) !== 'losses_name') throw error
        throw new Refusal('name-taken', `There is a loss called "${given.name}" already. Choose another name.`, { cause: error })
      }
    },

    async get(caller, name) {
      requireAction(caller, 'read')
      return recordOf(await find(caller.teamId, name))
    },

    async list(caller, { cursor, limit, model }) {
      requireAction(caller, 'read')
      const rows = await Loss.findAll({
        where: { teamId: caller.teamId, ...(cursor !== undefined && { name: { [Op.gt]: decodeCursor(cursor, 'text') } }) },
        include: [{ model: Model, as: 'model', required: true, ...(model !== undefined && { where: { name: model } }) }],
        order: [['name', 'ASC']],
        limit: limit + 1,
      })
      return pageOf(
        rows,
        limit,
        ({ name }) => [name],
        (row) => recordOf(row as LossWithModel),
      )
    },

    async versions(caller, name, { cursor, limit }) {
      requireAction(caller, 'read')
      const loss = await find(caller.teamId, name)
      const rows = await LossVersion.findAll({
        where: { lossId: loss.id, ...(cursor !== undefined && { number: { [Op.lt]: decodeCursor(cursor, 'number') } }) },
        order: [['number', 'DESC']],
        limit: limit + 1,
      })
      return pageOf(
        rows,
        limit,
        ({ number }) => [number],
        (row) => versionRecordOf(loss, row),
      )
    },

    async version(caller, name, number) {
      requireAction(caller, 'read')
      const loss = await find(caller.teamId, name)
      const row = await LossVersion.findOne({ where: { lossId: loss.id, number } })
      if (!row) throw noVersion(loss, number)
      return versionRecordOf(loss, row)
    },

    async import(caller, name, { loss: wire, checksum, validation }, requestId) {
      requireAction(caller, 'build')
      return database.transaction(async (transaction) => {
        const loss = await find(caller.teamId, name, transaction)
        requireModelInUse(loss.model)
        if (wire.kind !== loss.kind) {
          throw new Refusal(
            'artefact-unreadable',
            `The snapshot holds a loss of kind ${wire.kind}; loss "${name}" is ${loss.kind}. Import it into a loss of its kind.`,
            {
              errors: [{ pointer: '/kind', detail: `Expected ${loss.kind}.` }],
            },
          )
        }
        const artefact = readImport('parameters', () => lossFromWire(wire))
        requireChecksum(encodeLossVersion(artefact), checksum)
        const base = await Version.findOne({
          where: { modelId: loss.modelId, checksum: wire.base_checksum },
          order: [['number', 'DESC']],
          transaction,
        })
        if (!base) {
          throw new Refusal(
            'loss-of-another-base',
            `The loss was learned for the version with checksum ${wire.base_checksum.slice(0, 64)}, which model ` +
            `"${loss.model.name}" does not have. Import that version first.`,
            { errors: [{ pointer: '/base_checksum', detail: 'No version of this model has that checksum.' }] },
          )
        }
        requireJoints(artefact, base)
        return add(
          transaction,
          caller,
          loss,
          { artefact, base, origin: { kind: 'imported' }, validation, createdBy: callerLabel(caller) },
          requestId,
        )
      })
    },

    async snapshot(caller, name, number) {
      requireAction(caller, 'read')
      const loss = await find(caller.teamId, name)
      const row = await LossVersion.scope('withArtefact').findOne({ where: { lossId: loss.id, number } })
      if (!row) throw noVersion(loss, number)
      return { artefact: decodeLossVersion(row.artefact), checksum: row.checksum, validation: row.validation }
    },
  }
}

function requireJoints(artefact: LossArtefact, base: Version): void {
  const joints = base.network.sizes.at(-1)
  if (artefact.description.joints === joints) return
  throw new Refusal(
    'artefact-unreadable',
    `The loss is for ${artefact.description.joints} joints, its base version for ${joints}. ` +
    'Export the snapshot again and send it unchanged.',
    {
      errors: [{ pointer: '/description/joints', detail: `Expected ${joints}.` }],
    },
  )
}

function noVersion({ name }: Loss, number: number): Refusal {
  return new Refusal('not-found', `Loss "${name}" has no version ${number}. GET /v1/losses/${name}/versions lists them.`)
}

function recordOf(loss: LossWithModel): LossRecord {
  const { id, name, kind, description, createdAt, createdBy } = loss
  return { id, name, model: loss.model.name, kind, description, newestVersion: loss.newestVersion ?? null, createdAt, createdBy }
}

function versionRecordOf({ name, kind }: Loss, row: LossVersion): LossVersionRecord {
  const { number, baseVersion, baseChecksum, scheme, updateSettings, checksum, origin, validation, createdAt, createdBy } = row
  return {
    loss: name,
    version: number,
    kind,
    baseVersion,
    baseChecksum,
    scheme,
    update: updateSettings,
    checksum,
    origin,
    validation,
    createdAt,
    createdBy,
  }
}

import { Op } from 'sequelize'
import { Refusal } from '../../shared/contract/problems.ts'
import { duplicateKey } from '../database/connection.ts'
import { uuid7 } from '../database/uuid7.ts'
import type { Dependencies } from '../dependencies.ts'
import { findArm, requireArmInUse } from './arms.ts'
import { decodeCursor, pageOf, type Page, type PageRequest } from './page.ts'
import { findModel, type ModelWithArm } from './model-records.ts'
import { callerLabel, requireAction, type Caller } from './permissions.ts'

export interface ModelRecord {
  readonly id: string
  readonly name: string
  readonly arm: string
  readonly description: string
  readonly liveVersion: number | null
  readonly liveSince: Date | null
  /** Releases and rollbacks so far. */
  readonly releaseCount: number
  readonly newestVersion: number | null
  readonly archivedAt: Date | null
  readonly createdAt: Date
  readonly createdBy: string
}

export interface ModelService {
  create(caller: Caller, given: { name: string; arm: string; description?: string }, requestId?: string): Promise<ModelRecord>
  get(caller: Caller, name: string): Promise<ModelRecord>
  list(caller: Caller, page: PageRequest & { archived?: boolean; arm?: string }): Promise<Page<ModelRecord>>
  archive(caller: Caller, name: string, reason: string, requestId?: string): Promise<ModelRecord>
}

export function createModelService({ database, clock, audit, changeFeed }: Dependencies): ModelService {
  const { Arm, Model } = database.models

  return {
    async create(caller, given, requestId) {
      requireAction(caller, 'build')
      try {
        return await database.transaction(async (transaction) => {
          const arm = await findArm(database, caller.teamId, given.arm, transaction)
          requireArmInUse(arm)
          const model = await Model.create(
            {
              id: uuid7(),
              teamId: caller.teamId,
              armId: arm.id,
              name: given.name,
              description: given.description ?? '',
              createdAt: clock.now(),
              createdBy: callerLabel(caller),
            },
            { transaction },
          )
          await audit.record(transaction, {
            by: caller,
            action: 'model.create',
            subject: { kind: 'model', id: model.id, name: model.name },
            after: { name: model.name, arm: arm.name, description: model.description },
            requestId,
          })
          return modelRecord(Object.assign(model, { arm }))
        })
      } catch (error) {
        if (duplicateKey(error) !== 'models_name') throw error
        throw new Refusal(
          'name-taken',
          `There is a model called "${given.name}" already. Choose another name; archived models keep theirs.`,
          { cause: error },
        )
      }
    },

    async get(caller, name) {
      requireAction(caller, 'read_models')
      return modelRecord(await findModel(database, caller.teamId, name))
    },

    async list(caller, { cursor, limit, archived = false, arm }) {
      requireAction(caller, 'read_models')
      const rows = await Model.findAll({
        where: {
          teamId: caller.teamId,
          ...(!archived && { archivedAt: null }),
          ...(cursor !== undefined && { name: { [Op.gt]: decodeCursor(cursor, 'text') } }),
        },
        include: [{ model: Arm, as: 'arm', required: true, ...(arm !== undefined && { where: { name: arm } }) }],
        order: [['name', 'ASC']],
        limit: limit + 1,
      })
      return pageOf(
        rows,
        limit,
        ({ name }) => [name],
        (row) => modelRecord(row as ModelWithArm),
      )
    },

    async archive(caller, name, reason, requestId) {
      requireAction(caller, 'build')
      return database.transaction(async (transaction) => {
        const model = await findModel(database, caller.teamId, name, transaction)
        if (model.archivedAt) return modelRecord(model)
        await model.update({ archivedAt: clock.now() }, { transaction })
        await audit.record(transaction, {
          by: caller,
          action: 'model.archive',
          subject: { kind: 'model', id: model.id, name: model.name },
          reason,
          requestId,
        })
        await changeFeed.announce(transaction, { kind: 'archive', teamId: caller.teamId, subject: model.id })
        return modelRecord(model)
      })
    },
  }
}

export function modelRecord(model: ModelWithArm): ModelRecord {
  const { id, name, description, releaseCount, createdAt, createdBy } = model
  return {
    id,
    name,
    arm: model.arm.name,
    description,
    liveVersion: model.liveVersion ?? null,
    liveSince: model.liveSince ?? null,
    releaseCount: releaseCount ?? 0,
    newestVersion: model.newestVersion ?? null,
    archivedAt: model.archivedAt ?? null,
    createdAt,
    createdBy,
  }
}

/**
 * The model's entity tag. It changes with everything the model says; releases and rollbacks look at its first part only,
 * so that a fitting that ends in between does not turn a release down.
 */
export function modelEtag({
  id,
  releaseCount,
  newestVersion,
  archivedAt,
}: Pick<ModelRecord, 'id' | 'releaseCount' | 'newestVersion' | 'archivedAt'>): string {
  return `"${id.slice(-12)}.${releaseCount}-${newestVersion ?? 0}${archivedAt ? '-archived' : ''}"`
}

/**
 * Is this If-Match about the model's present releases?
 *
 * Source: RFC 9110, section 13.1.1: a list of entity tags, compared strongly; a weak tag never matches.
 *
 * @throws {Refusal} precondition-required: none, or `*`, with which two people could both win; precondition-failed
 */
export function requireReleaseMatch(ifMatch: string | undefined, model: ModelRecord): void {
  if (ifMatch === undefined || ifMatch.trim() === '' || ifMatch.trim() === '*') {
    throw new Refusal(
      'precondition-required',
      `Send If-Match with the ETag of GET /v1/models/${model.name}, so that nobody's release is overwritten unseen.`,
    )
  }
  const stem = `"${model.id.slice(-12)}.${model.releaseCount}-`
  const tags = ifMatch.match(/(?:W\/)?"[^"]*"/g) ?? []
  if (tags.some((tag) => tag.startsWith(stem))) return
  const live = model.liveVersion === null ? 'no version is live' : `version ${model.liveVersion} is live`
  throw new Refusal(
    'precondition-failed',
    `Model "${model.name}" has changed since you looked: now ${live}, after ${model.releaseCount} releases. ` +
    'Get it again and decide anew.',
  )
}

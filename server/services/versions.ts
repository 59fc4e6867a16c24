import { createHash } from 'node:crypto'
import { col, fn, Op, type Transaction } from 'sequelize'
import { Refusal } from '../../shared/contract/problems.ts'
import { versionFromWire } from '../../shared/contract/snapshots.ts'
import { ShapeError } from '../../shared/dynamics/shape-error.ts'
import { decodeVersion, encodeVersion, type Version as VersionArtefact } from '../../shared/dynamics/version.ts'
import { uuid7 } from '../database/uuid7.ts'
import type { Dependencies } from '../dependencies.ts'
import type { Arm, StoredJoint } from '../models/arm.ts'
import type { StoredMetrics, Version, VersionOrigin } from '../models/version.ts'
import { findModel, requireModelInUse, type ModelWithArm } from './model-records.ts'
import { decodeCursor, pageOf, type Page, type PageRequest } from './page.ts'
import { callerLabel, requireAction, type Caller } from './permissions.ts'

export interface VersionRecord {
  readonly id: string
  readonly model: string
  readonly version: number
  readonly origin: VersionOrigin
  readonly network: Version['network']
  readonly checksum: string
  readonly metrics: StoredMetrics | null
  readonly recommended: Version['recommended']
  readonly createdAt: Date
  readonly createdBy: string
  readonly firstReleasedAt: Date | null
}

/** A version with its artefact and the joints it is for: what a snapshot is made of. */
export interface VersionWithArtefact {
  readonly model: string
  readonly version: number
  readonly joints: readonly StoredJoint[]
  readonly artefact: VersionArtefact
  readonly checksum: string
  readonly metrics: StoredMetrics | null
}

export interface NewVersion {
  readonly artefact: VersionArtefact
  readonly origin: VersionOrigin
  readonly metrics: StoredMetrics | null
  readonly recommended: Version['recommended']
  readonly createdBy: string
}

/** A snapshot as it came; `description` and `parameters` are read by shared/contract/snapshots.ts. */
export interface VersionImport {
  readonly jointNames: readonly string[]
  readonly unit: readonly string[]
  readonly description: object
  readonly parameters: string
  readonly checksum: string
  readonly metrics: StoredMetrics | null
}

export interface VersionService {
  get(caller: Caller, model: string, version: number): Promise<VersionRecord>
  list(caller: Caller, model: string, page: PageRequest): Promise<Page<VersionRecord>>
  import(caller: Caller, model: string, given: VersionImport, requestId?: string): Promise<VersionRecord>
  snapshot(caller: Caller, model: string, version: number): Promise<VersionWithArtefact>
  /** Appends a version in the transaction of what made it. The model's row must be locked in it. */
  add(
    transaction: Transaction,
    by: Caller | 'system',
    model: ModelWithArm,
    given: NewVersion,
    requestId?: string,
  ): Promise<VersionRecord>
}

export function createVersionService({ database, clock, audit, changeFeed }: Dependencies): VersionService {
  const { Model, Release, Version } = database.models

  async function firstReleases(modelId: string, versions: readonly number[]): Promise<Map<number, Date>> {
    const rows = (await Release.findAll({
      where: { modelId, version: { [Op.in]: [...versions] } },
      attributes: ['version', [fn('MIN', col('created_at')), 'firstAt']],
      group: ['version'],
      raw: true,
    })) as unknown as { version: number; firstAt: Date | string }[]
    return new Map(rows.map(({ version, firstAt }) => [version, new Date(firstAt)]))
  }

  async function add(
    transaction: Transaction,
    by: Caller | 'system',
    model: ModelWithArm,
    { artefact, origin, metrics, recommended, createdBy }: NewVersion,
    requestId?: string,
  ): Promise<VersionRecord> {
    const bytes = Buffer.from(encodeVersion(artefact))
    const number = (model.newestVersion ?? 0) + 1
    const row = await Version.create(
      {
        id: uuid7(),
        teamId: model.teamId,
        modelId: model.id,
        number,
        origin,
        network: { sizes: [...artefact.description.network.sizes], activation: artefact.description.network.activation },
        artefact: bytes,
        checksum: checksumOf(bytes),
        metrics,
        recommended,
        createdAt: clock.now(),
        createdBy,
      },
      { transaction },
    )
    await Model.update({ newestVersion: number }, { where: { id: model.id }, transaction })
    await audit.record(transaction, {
      by,
      teamId: model.teamId,
      action: `version.${origin.kind}`,
      subject: { kind: 'model', id: model.id, name: model.name },
      after: { version: number, checksum: row.checksum, origin },
      requestId,
    })
    await changeFeed.announce(transaction, { kind: 'version', teamId: model.teamId, subject: model.id })
    return recordOf(model.name, row, undefined)
  }

  return {
    add,

    async get(caller, name, number) {
      requireAction(caller, 'read_models')
      const model = await findModel(database, caller.teamId, name)
      const row = await Version.findOne({ where: { modelId: model.id, number } })
      if (!row) throw noVersion(model, number)
      return recordOf(model.name, row, (await firstReleases(model.id, [number])).get(number))
    },

    async list(caller, name, { cursor, limit }) {
      requireAction(caller, 'read_models')
      const model = await findModel(database, caller.teamId, name)
      const rows = await Version.findAll({
        where: { modelId: model.id, ...(cursor !== undefined && { number: { [Op.lt]: decodeCursor(cursor, 'number') } }) },
        order: [['number', 'DESC']],
        limit: limit + 1,
      })
      const released = await firstReleases(
        model.id,
        rows.map(({ number }) => number),
      )
      return pageOf(
        rows,
        limit,
        ({ number }) => [number],
        (row) => recordOf(model.name, row, released.get(row.number)),
      )
    },

    async import(caller, name, given, requestId) {
      requireAction(caller, 'build')
      return database.transaction(async (transaction) => {
        const model = await findModel(database, caller.teamId, name, transaction)
        requireModelInUse(model)
        requireSameJoints(model, given)
        const artefact = readImport('parameters', () => versionFromWire(given.description, given.parameters))
        requireJointCount(artefact, model.arm)
        requireChecksum(encodeVersion(artefact), given.checksum)
        return add(
          transaction,
          caller,
          model,
          { artefact, origin: { kind: 'imported' }, metrics: given.metrics, recommended: {}, createdBy: callerLabel(caller) },
          requestId,
        )
      })
    },

    async snapshot(caller, name, number) {
      requireAction(caller, 'snapshot')
      const model = await findModel(database, caller.teamId, name)
      const row = await Version.scope('withArtefact').findOne({ where: { modelId: model.id, number } })
      if (!row) throw noVersion(model, number)
      return {
        model: model.name,
        version: number,
        joints: model.arm.joints,
        artefact: decodeVersion(row.artefact),
        checksum: row.checksum,
        metrics: row.metrics,
      }
    },
  }
}

/** SHA-256 of an artefact's bytes, hex: the name of what it holds. */
export function checksumOf(bytes: Uint8Array): string {
  return createHash('sha256').update(bytes).digest('hex')
}

/** @throws {Refusal} artefact-unreadable: what `read` says is wrong */
export function readImport<T>(pointer: string, read: () => T): T {
  try {
    return read()
  } catch (error) {
    if (!(error instanceof ShapeError)) throw error
    throw new Refusal('artefact-unreadable', `${error.message} Export the snapshot again and send it unchanged.`, {
      errors: [{ pointer: `/${pointer}`, detail: error.message }],
      cause: error,
    })
  }
}

/** @throws {Refusal} artefact-unreadable: the content is not what the checksum names */
export function requireChecksum(bytes: Uint8Array, given: string): void {
  const found = checksumOf(bytes)
  if (found === given) return
  const detail = `The content's checksum is ${found}, the snapshot says ${given}: it was changed on the way. ` +
    'Export it again and send it unchanged.'
  throw new Refusal('artefact-unreadable', detail, { errors: [{ pointer: '/checksum', detail }] })
}

function requireSameJoints({ arm }: ModelWithArm, { jointNames, unit }: VersionImport): void {
  const names = arm.joints.map(({ name }) => name)
  if (names.length !== jointNames.length || names.some((name, k) => name !== jointNames[k])) {
    throw new Refusal(
      'wrong-joints',
      `The snapshot is for joints ${jointNames.join(', ')}; arm "${arm.name}" has ${names.join(', ')}. ` +
      'A version fits one joint list, in one order: import it into a model of that arm.',
      { errors: [{ pointer: '/joint_names', detail: 'Not the joints of the arm, in its order.' }] },
    )
  }
  arm.joints.forEach((joint, k) => {
    const expected = joint.type === 'prismatic' ? 'N' : 'N·m'
    if (unit[k] !== expected) {
      throw new Refusal(
        'wrong-joints',
        `unit: joint "${joint.name}" is in ${unit[k]} in the snapshot and in ${expected} on arm "${arm.name}". ` +
        'Import it into a model of the arm it was made for.',
      )
    }
  })
}

function requireJointCount({ description: { joints } }: VersionArtefact, { joints: expected }: Arm): void {
  if (joints === expected.length) return
  const detail = `The snapshot's network is for ${joints} joints; its joint_names are ${expected.length}. Export it again and send it unchanged.`
  throw new Refusal('artefact-unreadable', detail, { errors: [{ pointer: '/description/joints', detail: `Expected ${expected.length}.` }] })
}

function noVersion({ name }: ModelWithArm, number: number): Refusal {
  return new Refusal('not-found', `Model "${name}" has no version ${number}. GET /v1/models/${name}/versions lists them.`)
}

function recordOf(model: string, row: Version, firstReleasedAt: Date | undefined): VersionRecord {
  const { id, number, origin, network, checksum, metrics, recommended, createdAt, createdBy } = row
  return {
    id,
    model,
    version: number,
    origin,
    network,
    checksum,
    metrics: metrics ?? null,
    recommended,
    createdAt,
    createdBy,
    firstReleasedAt: firstReleasedAt ?? null,
  }
}

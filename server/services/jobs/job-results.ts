import type { Transaction } from 'sequelize'
import { Refusal } from '../../../shared/contract/problems.ts'
import type { Motion } from '../../../shared/dynamics/motion.ts'
import type { Database } from '../../database/connection.ts'
import type { JobInput, JobOutput } from '../../jobs/worker-messages.ts'
import type { Job } from '../../models/job.ts'
import type { LossService } from '../losses.ts'
import { findModel, type ModelWithArm } from '../model-records.ts'
import type { RecordingService } from '../recordings/recordings.ts'
import type { VersionService } from '../versions.ts'

interface Parts {
  readonly database: Database
  readonly recordings: RecordingService
  readonly versions: VersionService
  readonly losses: LossService
}

/**
 * Reads everything a job computes from.
 *
 * @throws {Refusal} recordings-unsuitable: a recording was deleted since the job was asked for
 */
export async function readJobInput({ database, recordings }: Parts, job: Job): Promise<JobInput> {
  const motionsOf = async (ids: readonly string[]) => {
    const motions: Motion[] = []
    for (const id of ids) motions.push(await motionOf(recordings, job.teamId, id))
    return motions
  }
  const { parameters, work } = job
  if (parameters.kind === 'fit') {
    const arm = await database.models.Arm.findByPk(work.armId, { rejectOnEmpty: true })
    return {
      kind: 'fit',
      parameters,
      joints: arm.joints.map(({ name, type }) => ({ name, unit: type === 'prismatic' ? 'N' : 'N·m' })),
      training: await motionsOf(parameters.recordings.filter((id) => !parameters.heldOut.includes(id))),
      heldOut: await motionsOf(parameters.heldOut),
      validation: await motionsOf(await stillThere(database, work.validation ?? [])),
    }
  }
  const base = await database.models.Version.scope('withArtefact').findByPk(work.baseVersionId, { rejectOnEmpty: true })
  const loss = await database.models.Loss.findByPk(work.lossId, { rejectOnEmpty: true })
  return {
    kind: 'meta_train',
    parameters,
    lossKind: loss.kind,
    base: Uint8Array.from(base.artefact),
    baseChecksum: base.checksum,
    training: await motionsOf(parameters.recordings),
    validation: await motionsOf(parameters.validation),
  }
}

/** Stores what a job made, in the transaction that ends it, and answers where it is. */
export async function storeJobOutput(
  { database, versions, losses }: Parts,
  job: Job,
  output: JobOutput,
  transaction: Transaction,
): Promise<NonNullable<Job['result']>> {
  if (output.kind === 'fit' && job.parameters.kind === 'fit') {
    const model = await modelOf(database, job, transaction)
    const { artefact, metrics, recommended } = output
    const { version } = await versions.add(transaction, 'system', model, {
      artefact,
      metrics,
      recommended,
      origin: { kind: 'fitted', job: job.id, recordings: [...job.work.recordings] },
      createdBy: job.createdBy,
    })
    return { model: model.name, version }
  }
  if (output.kind === 'meta_train' && job.parameters.kind === 'meta_train') {
    const loss = await losses.find(job.teamId, job.parameters.loss, transaction)
    const base = await database.models.Version.findByPk(job.work.baseVersionId, { transaction, rejectOnEmpty: true })
    const { artefact, validation } = output
    const { version } = await losses.add(transaction, 'system', loss, {
      artefact,
      base,
      validation,
      origin: { kind: 'meta_trained', job: job.id },
      createdBy: job.createdBy,
    })
    return { loss: loss.name, version }
  }
  throw new Error(`A job of kind ${job.kind} gave a result of kind ${output.kind}.`)
}

async function motionOf(recordings: RecordingService, teamId: string, id: string): Promise<Motion> {
  try {
    return await recordings.motion(teamId, id)
  } catch (error) {
    if (!(error instanceof Refusal)) throw error
    throw new Refusal(
      'recordings-unsuitable',
      `Recording ${id} was deleted before the job began. Start the job again without it.`,
      { cause: error },
    )
  }
}

async function stillThere(database: Database, ids: readonly string[]): Promise<string[]> {
  const rows = await database.models.Recording.findAll({ where: { id: [...ids] }, attributes: ['id'] })
  return ids.filter((id) => rows.some((row) => row.id === id))
}

async function modelOf(database: Database, job: Job, transaction: Transaction): Promise<ModelWithArm> {
  const { name } = await database.models.Model.findByPk(job.work.modelId, { transaction, rejectOnEmpty: true })
  return findModel(database, job.teamId, name, transaction)
}

import { Op } from 'sequelize'
import { Refusal, type Fault } from '../../../shared/contract/problems.ts'
import type { Database } from '../../database/connection.ts'
import type { FitParameters, JobParameters, JobWork, MetaTrainParameters } from '../../jobs/job-kinds.ts'
import type { Recording, RecordingUse } from '../../models/recording.ts'
import type { LossService } from '../losses.ts'
import { findModel, requireModelInUse } from '../model-records.ts'

/** What is asked for; what is left out takes a default. */
export type JobRequest =
  | (Pick<FitParameters, 'kind' | 'model'> & Partial<Omit<FitParameters, 'kind' | 'model'>>)
  | (Pick<MetaTrainParameters, 'kind' | 'loss'> & Partial<Omit<MetaTrainParameters, 'kind' | 'loss'>>)

/** As in server/jobs/training, which holds tfjs and so is loaded in workers only; a test holds the two together. */
export const fitDefaults = { hidden: [64, 64], activation: 'relu', epochs: 60, rowsPerStep: 256, rate: 1e-2, seed: 1 } as const
export const metaTrainDefaults = {
  scheme: 'all',
  positive: 'exp',
  hidden: 32,
  updates: 800,
  innerSteps: 15,
  streams: 16,
  rowsPerStep: 4,
  seed: 1,
} as const

/** Of so many recordings one is held out. */
const HELD_OUT_EVERY = 5

export interface PreparedJob {
  readonly parameters: JobParameters
  readonly work: JobWork
}

/**
 * Fills in defaults and holds a job to the uses of recordings: a fitting learns from `fit` alone, a meta-training from
 * `meta_train` and chooses rates on `validate`. What is for evaluation trains nothing.
 *
 * @throws {Refusal} not-found, archived, no-live-version, recordings-unsuitable
 */
export async function prepareJob(
  d: { database: Database; losses: LossService },
  teamId: string,
  request: JobRequest,
): Promise<PreparedJob> {
  return request.kind === 'fit' ? prepareFit(d.database, teamId, request) : prepareMetaTrain(d, teamId, request)
}

async function prepareFit(database: Database, teamId: string, request: JobRequest & { kind: 'fit' }): Promise<PreparedJob> {
  const model = await findModel(database, teamId, request.model)
  requireModelInUse(model)
  const pick = recordingPicker(database, model.arm)
  const chosen = await pick('recordings', request.recordings, 'fit', 'A fitting')
  const heldOut = request.heldOut ? await pick('held_out', request.heldOut, 'fit', 'A fitting') : chosen.filter(isHeldOut)
  const foreign = heldOut.find(({ id }) => !chosen.some((recording) => recording.id === id))
  if (foreign)
    throw unsuitable(
      `held_out names "${foreign.name}", which is not among the recordings of this fitting. Hold out some of those.`,
    )
  if (heldOut.length === chosen.length) {
    throw unsuitable(
      `${chosen.length} recordings of arm "${model.arm.name}" with use fit, ${heldOut.length} of them held out to measure ` +
      'on: nothing is left to learn from. Upload more, or hold out fewer.',
    )
  }
  const validation = await allWithUse(database, model.arm.id, 'validate')
  return {
    parameters: {
      ...fitDefaults,
      ...definedOf(request),
      kind: 'fit',
      model: model.name,
      recordings: chosen.map(({ id }) => id),
      heldOut: heldOut.map(({ id }) => id),
    },
    work: {
      armId: model.arm.id,
      modelId: model.id,
      recordings: chosen.map(nameOf),
      validation: validation.map(({ id }) => id),
      lossId: '',
      baseVersionId: '',
    },
  }
}

async function prepareMetaTrain(
  { database, losses }: { database: Database; losses: LossService },
  teamId: string,
  request: JobRequest & { kind: 'meta_train' },
): Promise<PreparedJob> {
  const loss = await losses.find(teamId, request.loss)
  const model = await findModel(database, teamId, loss.model.name)
  requireModelInUse(model)
  const version = request.version ?? model.liveVersion ?? model.newestVersion ?? null
  if (version === null)
    throw new Refusal(
      'no-live-version',
      `Model "${model.name}" has no version yet that a loss could be learned for. Fit or import one first.`,
    )
  const base = await database.models.Version.findOne({ where: { modelId: model.id, number: version } })
  if (!base)
    throw new Refusal(
      'not-found',
      `Model "${model.name}" has no version ${version}. GET /v1/models/${model.name}/versions lists them.`,
    )
  const pick = recordingPicker(database, model.arm)
  const chosen = await pick('recordings', request.recordings, 'meta_train', 'A meta-training')
  const validation = await pick('validation', request.validation, 'validate', 'Choosing rates in a meta-training')
  const parameters: MetaTrainParameters = {
    ...metaTrainDefaults,
    ...definedOf(request),
    kind: 'meta_train',
    loss: loss.name,
    version,
    recordings: chosen.map(({ id }) => id),
    validation: validation.map(({ id }) => id),
  }
  refuseShort(chosen, (parameters.innerSteps + 1) * parameters.rowsPerStep, parameters)
  return {
    parameters,
    work: { armId: model.arm.id, modelId: model.id, recordings: chosen.map(nameOf), lossId: loss.id, baseVersionId: base.id },
  }
}

function isHeldOut(_: Recording, index: number, { length }: readonly Recording[]): boolean {
  return length < HELD_OUT_EVERY ? index === length - 1 : index % HELD_OUT_EVERY === HELD_OUT_EVERY - 1
}

/** The recordings of the arm that a field names, or all with the use; refused by name where one has another. */
function recordingPicker(database: Database, arm: { id: string; name: string; teamId: string }) {
  return async (field: string, ids: readonly string[] | undefined, use: RecordingUse, job: string): Promise<Recording[]> => {
    if (ids === undefined) {
      const all = await allWithUse(database, arm.id, use)
      if (all.length === 0)
        throw unsuitable(`${job} takes recordings with use ${use}, and arm "${arm.name}" has none. Upload some with that use.`)
      return all
    }
    const found = await database.models.Recording.findAll({ where: { teamId: arm.teamId, id: { [Op.in]: [...ids] } } })
    const byId = new Map(found.map((recording) => [recording.id, recording]))
    const faults: Fault[] = []
    ids.forEach((id, index) => {
      const recording = byId.get(id.toLowerCase())
      const fault = (detail: string) => faults.push({ pointer: `/${field}/${index}`, detail })
      if (!recording) fault(`There is no recording ${id} in your team.`)
      else if (recording.armId !== arm.id) fault(`"${recording.name}" is a recording of another arm than "${arm.name}".`)
      else if (recording.use !== use)
        fault(`"${recording.name}" has use ${recording.use}. ${job} takes only recordings with use ${use}.`)
    })
    if (faults.length > 0) {
      const more = faults.length > 1 ? ` And ${faults.length - 1} more; each is in "errors".` : ''
      throw unsuitable(`${faults[0].detail}${more} Choose others.`, faults)
    }
    return ids.map((id) => byId.get(id.toLowerCase())!)
  }
}

function allWithUse(database: Database, armId: string, use: RecordingUse): Promise<Recording[]> {
  return database.models.Recording.findAll({
    where: { armId, use },
    order: [
      ['name', 'ASC'],
      ['id', 'ASC'],
    ],
  })
}

function refuseShort(recordings: readonly Recording[], rows: number, { innerSteps, rowsPerStep }: MetaTrainParameters): void {
  const short = recordings.find(({ rowCount }) => rowCount < rows)
  if (short) {
    throw unsuitable(
      `"${short.name}" has ${short.rowCount} rows; ${innerSteps} inner steps of ${rowsPerStep} rows, and one batch after ` +
      `them, need ${rows}. Leave it out, or unroll fewer steps.`,
    )
  }
}

function nameOf({ name, checksum }: Recording): { name: string; checksum: string } {
  return { name, checksum }
}

function unsuitable(detail: string, errors: readonly Fault[] = []): Refusal {
  return new Refusal('recordings-unsuitable', detail, { errors })
}

function definedOf<T extends object>(value: T): Partial<T> {
  return Object.fromEntries(Object.entries(value).filter(([, part]) => part !== undefined)) as Partial<T>
}

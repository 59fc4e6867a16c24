import { Op } from 'sequelize'
import { Refusal } from '../../../shared/contract/problems.ts'
import { uuid7 } from '../../database/uuid7.ts'
import type { Dependencies } from '../../dependencies.ts'
import type { JobParameters } from '../../jobs/job-kinds.ts'
import { createJobQueue } from '../../jobs/queue.ts'
import type { Job, JobState } from '../../models/job.ts'
import type { LossService } from '../losses.ts'
import { decodeCursor, pageOf, type Page, type PageRequest } from '../page.ts'
import { callerLabel, requireAction, type Caller } from '../permissions.ts'
import type { RecordingService } from '../recordings/recordings.ts'
import type { VersionService } from '../versions.ts'
import { hasEnded, jobRecord, type JobPoint, type JobRecord } from './job-records.ts'
import { prepareJob, type JobRequest } from './job-requests.ts'
import { readJobInput, storeJobOutput } from './job-results.ts'

/** How far a reader of a job's events has got. */
export interface JobPosition {
  readonly changeNumber: number
  readonly pointNumber: number
}

export type JobEvent = { readonly kind: 'job'; readonly job: JobRecord } | { readonly kind: 'point'; readonly point: JobPoint }

export interface JobService {
  create(caller: Caller, request: JobRequest, requestId?: string): Promise<JobRecord>
  get(caller: Caller, id: string): Promise<JobRecord>
  list(caller: Caller, page: PageRequest & { kind?: JobParameters['kind']; state?: JobState }): Promise<Page<JobRecord>>
  curve(caller: Caller, id: string): Promise<JobPoint[]>
  cancel(caller: Caller, id: string, reason: string, requestId?: string): Promise<JobRecord>
  /** What happened to the job since, in order: points before the change that follows them. */
  events(caller: Caller, id: string, since: JobPosition): Promise<{ events: JobEvent[]; ended: boolean }>
  start(): Promise<void>
  stop(): Promise<void>
}

/** Points read at a time by one who follows a job. */
const MOST_POINTS = 2_000

export function createJobService(
  d: Dependencies & { recordings: RecordingService; versions: VersionService; losses: LossService },
): JobService {
  const { database, clock, audit, log, settings } = d
  const { Job } = database.models
  const queue = createJobQueue({
    database,
    log,
    threads: settings.jobThreads,
    niceness: settings.jobNiceness,
    readInput: (job) => readJobInput(d, job),
    storeOutput: (job, output, transaction) => storeJobOutput(d, job, output, transaction),
  })

  async function find(teamId: string, id: string): Promise<Job> {
    const job = await Job.findOne({ where: { teamId, id } })
    if (!job) throw noJob(id)
    return job
  }

  async function pointsAfter(id: string, number: number, most: number): Promise<JobPoint[]> {
    return database.pool.query<JobPoint[]>(
      'SELECT number, series, x, y FROM job_points WHERE job_id = ? AND number > ? ORDER BY number LIMIT ?',
      [id, number, most],
    )
  }

  return {
    async create(caller, request, requestId) {
      requireAction(caller, 'build')
      const { parameters, work } = await prepareJob(d, caller.teamId, request)
      const record = await database.transaction(async (transaction) => {
        const job = await Job.create(
          {
            id: uuid7(),
            teamId: caller.teamId,
            kind: parameters.kind,
            state: 'queued',
            progress: 0,
            message: 'Waiting for its turn.',
            parameters,
            work,
            result: null,
            problem: null,
            createdAt: clock.now(),
            createdBy: callerLabel(caller),
          },
          { transaction },
        )
        await audit.record(transaction, {
          by: caller,
          action: 'job.create',
          subject: { kind: 'job', id: job.id, name: parameters.kind },
          after: parameters,
          requestId,
        })
        return jobRecord(job)
      })
      queue.wake()
      return record
    },

    async get(caller, id) {
      requireAction(caller, 'read')
      return jobRecord(await find(caller.teamId, id))
    },

    async list(caller, { cursor, limit, kind, state }) {
      requireAction(caller, 'read')
      const rows = await Job.findAll({
        where: {
          teamId: caller.teamId,
          ...(kind !== undefined && { kind }),
          ...(state !== undefined && { state }),
          ...(cursor !== undefined && { id: { [Op.lt]: decodeCursor(cursor, 'text') } }),
        },
        order: [['id', 'DESC']],
        limit: limit + 1,
      })
      return pageOf(rows, limit, ({ id }) => [id], jobRecord)
    },

    async curve(caller, id) {
      requireAction(caller, 'read')
      await find(caller.teamId, id)
      return pointsAfter(id, 0, 1_000_000)
    },

    async cancel(caller, id, reason, requestId) {
      requireAction(caller, 'build')
      const record = await database.transaction(async (transaction) => {
        const job = await Job.findOne({ where: { teamId: caller.teamId, id }, transaction, lock: transaction.LOCK.UPDATE })
        if (!job) throw noJob(id)
        if (hasEnded(job)) throw new Refusal('job-ended', `The job is ${job.state} already, so there is nothing to cancel.`)
        if (job.cancelAt) return jobRecord(job)
        const now = clock.now()
        const change = {
          cancelAt: now,
          cancelBy: callerLabel(caller),
          cancelReason: reason,
          changeNumber: (job.changeNumber ?? 0) + 1,
        }
        if (job.state === 'queued')
          await job.update({ ...change, state: 'cancelled', message: 'Cancelled.', endedAt: now }, { transaction })
        else await job.update({ ...change, message: 'Cancelling.' }, { transaction })
        await audit.record(transaction, {
          by: caller,
          action: 'job.cancel',
          subject: { kind: 'job', id, name: job.kind },
          reason,
          requestId,
        })
        return jobRecord(job)
      })
      queue.noticeCancel(id)
      return record
    },

    async events(caller, id, since) {
      requireAction(caller, 'read')
      const job = jobRecord(await find(caller.teamId, id))
      const points = await pointsAfter(id, since.pointNumber, MOST_POINTS)
      const events: JobEvent[] = points.map((point) => ({ kind: 'point', point }))
      if (job.changeNumber > since.changeNumber) events.push({ kind: 'job', job })
      // The last points are stored before the end is, so a job read as ended has no more to come than were read after it.
      return { events, ended: hasEnded(job) && points.length < MOST_POINTS }
    },

    start: () => queue.start(),
    stop: () => queue.stop(),
  }
}

function noJob(id: string): Refusal {
  return new Refusal('not-found', `There is no job ${id} in your team. GET /v1/jobs lists them.`)
}

import { setTimeout as sleep } from 'node:timers/promises'
import type { Worker } from 'node:worker_threads'
import type { Logger } from 'pino'
import type { ProblemSlug } from '../../shared/contract/problems.ts'
import { Refusal } from '../../shared/contract/problems.ts'
import type { Database } from '../database/connection.ts'
import { uuid7 } from '../database/uuid7.ts'
import type { Job } from '../models/job.ts'
import { startThread } from '../thread.ts'
import type { JobInput, JobOutput, WorkerMessage, WorkerStart } from './worker-messages.ts'

export interface JobQueue {
  start(): Promise<void>
  /** Looks for work at once, when some has just been queued. */
  wake(): void
  /** Passes on that jobs were cancelled, when this process may be running them. */
  noticeCancel(jobId: string): void
  /** Ends what runs; those jobs are failed, to be run again. */
  stop(): Promise<void>
}

export interface JobQueueParts {
  readonly database: Database
  readonly log: Logger
  /** Jobs at a time in this process. */
  readonly threads: number
  /** How far their threads stand back behind the event loop's. */
  readonly niceness: number
  readInput(job: Job): Promise<JobInput>
  storeOutput(
    job: Job,
    output: JobOutput,
    transaction: Parameters<Parameters<Database['transaction']>[0]>[0],
  ): Promise<NonNullable<Job['result']>>
}

const pollMs = 1_000
const beatMs = 500
/** A process that has not said for so long that it is at work has gone, or cannot reach the database. */
const leaseSeconds = 10
/** Handlers look for a cancel several times a second; one that does not is ended. */
const graceMs = 5_000
const storeAttempts = 20

interface Running {
  readonly jobId: string
  readonly lease: string
  cancel(): void
  /** Ends the thread, and the job as failed. */
  abandon(): Promise<void>
  readonly ended: Promise<void>
}

/**
 * Jobs are rows of a table. Processes claim them under a lease that only the one at work renews, so no two work on the
 * same, and a job whose process has gone is found by its lease having run out. What a job makes is stored in the
 * transaction that ends it, and only while the lease is still held.
 */
export function createJobQueue({ database, log, threads, niceness, readInput, storeOutput }: JobQueueParts): JobQueue {
  const { pool } = database
  const { Job } = database.models
  const running = new Map<string, Running>()
  let timer: NodeJS.Timeout | undefined
  let looking: Promise<void> | undefined
  let stopped = true

  async function claim(): Promise<{ job: Job; lease: string } | undefined> {
    const lease = uuid7()
    const { affectedRows } = (await pool.query(
      `UPDATE jobs SET state = 'running', message = 'Reading recordings.', started_at = UTC_TIMESTAMP(3),
         change_number = change_number + 1,
         lease_owner = ?, lease_until = UTC_TIMESTAMP(3) + INTERVAL ${leaseSeconds} SECOND
       WHERE state = 'queued' ORDER BY id LIMIT 1`,
      [lease],
    )) as { affectedRows: number }
    if (affectedRows === 0) return undefined
    return { job: await Job.findOne({ where: { leaseOwner: lease }, rejectOnEmpty: true }), lease }
  }

  /** Jobs whose process has gone. Our own are not among them, however long the database was away. */
  async function failLost(): Promise<void> {
    const ours = [...running.values()].map(({ lease }) => lease)
    const detail = 'The server process that ran this job ended before the job did. Start the job again.'
    await pool.query(
      `UPDATE jobs SET state = IF(cancel_at IS NULL, 'failed', 'cancelled'),
         message = IF(cancel_at IS NULL, 'Run it again.', 'Cancelled.'),
         problem = IF(cancel_at IS NULL, ?, NULL), ended_at = UTC_TIMESTAMP(3), change_number = change_number + 1,
         lease_owner = NULL, lease_until = NULL
       WHERE state = 'running' AND lease_until < UTC_TIMESTAMP(3)${ours.length > 0 ? ' AND lease_owner NOT IN (?)' : ''}`,
      [JSON.stringify({ slug: 'internal', detail }), ...(ours.length > 0 ? [ours] : [])],
    )
  }

  async function look(): Promise<void> {
    await failLost()
    while (!stopped && running.size < threads) {
      const claimed = await claim()
      if (!claimed) return
      const { id } = claimed.job
      const run = runJob({ database, log, niceness, readInput, storeOutput }, claimed.job, claimed.lease)
      running.set(id, run)
      void run.ended.finally(() => {
        running.delete(id)
        wake()
      })
    }
  }

  function wake(): void {
    if (stopped) return
    looking ??= look()
      .catch((error: unknown) => log.warn({ err: error }, 'the job queue could not be read'))
      .finally(() => (looking = undefined))
  }

  return {
    async start() {
      stopped = false
      wake()
      timer = setInterval(wake, pollMs)
      timer.unref()
    },
    wake,
    noticeCancel: (jobId) => running.get(jobId)?.cancel(),
    async stop() {
      stopped = true
      clearInterval(timer)
      await looking
      await Promise.all([...running.values()].map((run) => run.abandon()))
    },
  }
}

type End =
  | { state: 'done'; output: JobOutput }
  | { state: 'failed'; slug: ProblemSlug; detail: string }
  | { state: 'cancelled' }
  /** The lease is somebody else's: nothing more may be written. */
  | { state: 'lost' }

function runJob(
  { database, log, niceness, readInput, storeOutput }: Omit<JobQueueParts, 'threads'>,
  job: Job,
  lease: string,
): Running {
  const { pool } = database
  const flag = new Int32Array(new SharedArrayBuffer(4))
  let thread: Worker | undefined
  let grace: NodeJS.Timeout | undefined
  let beat: NodeJS.Timeout | undefined
  let beating: Promise<void> | undefined
  let latest: { progress: number; message: string } | undefined
  let points: { series: string; x: number; y: number }[] = []
  let pointNumber = 0
  let settle: (end: End) => void = () => undefined
  const outcome = new Promise<End>((resolve) => (settle = resolve))

  function cancel(): void {
    Atomics.store(flag, 0, 1)
    grace ??= setTimeout(() => settle({ state: 'cancelled' }), graceMs)
  }

  async function keepLease(): Promise<void> {
    const news = latest
    latest = undefined
    const change = news ? 'progress = ?, message = ?, change_number = change_number + 1,' : ''
    const { affectedRows } = (await pool.query(
      `UPDATE jobs SET ${change} lease_until = UTC_TIMESTAMP(3) + INTERVAL ${leaseSeconds} SECOND
       WHERE id = ? AND lease_owner = ? AND state = 'running'`,
      [...(news ? [news.progress, news.message.slice(0, 300)] : []), job.id, lease],
    )) as { affectedRows: number }
    if (affectedRows === 0) settle({ state: 'lost' })
    await storePoints()
    const [row] = await pool.query<{ cancel_at: Date | null }[]>('SELECT cancel_at FROM jobs WHERE id = ?', [job.id])
    if (row?.cancel_at) cancel()
  }

  async function storePoints(): Promise<void> {
    const taken = points
    points = []
    if (taken.length === 0) return
    const rows = taken.map(({ series, x, y }) => [job.id, ++pointNumber, series, x, y])
    await pool.batch('INSERT INTO job_points (job_id, number, series, x, y) VALUES (?, ?, ?, ?, ?)', rows)
  }

  function onMessage(message: WorkerMessage): void {
    if (message.kind === 'progress') latest = message
    else if (message.kind === 'point') points.push(message)
    else if (message.kind === 'done') settle({ state: 'done', output: message.output })
    else if (message.kind === 'cancelled') settle({ state: 'cancelled' })
    else {
      if (message.slug === 'internal') log.error({ jobId: job.id, stack: message.stack }, 'a job failed by a mistake of ours')
      settle({ state: 'failed', slug: message.slug, detail: message.detail })
    }
  }

  async function work(): Promise<End> {
    beat = setInterval(() => {
      beating ??= keepLease()
        .catch((error: unknown) => log.warn({ err: error, jobId: job.id }, "a job's progress could not be stored"))
        .finally(() => (beating = undefined))
    }, beatMs)
    try {
      const input = await readInput(job)
      const start: WorkerStart = { input, niceness, cancel: flag.buffer as SharedArrayBuffer }
      thread = startThread(new URL('./worker.ts', import.meta.url), start, buffersOf(input))
      thread.on('message', onMessage)
      thread.on('error', (error: NodeJS.ErrnoException) => {
        log.error({ err: error, jobId: job.id }, "a job's thread failed")
        const detail =
          error.code === 'ERR_WORKER_OUT_OF_MEMORY'
            ? 'The job ran out of memory. Use fewer or shorter recordings, or a smaller network.'
            : 'The thread that ran this job failed. Start the job again.'
        settle({ state: 'failed', slug: 'internal', detail })
      })
      thread.on('exit', () =>
        settle({ state: 'failed', slug: 'internal', detail: 'The thread that ran this job ended early. Start the job again.' }),
      )
    } catch (error) {
      if (error instanceof Refusal) settle({ state: 'failed', slug: error.kind.slug, detail: error.message })
      else {
        log.error({ err: error, jobId: job.id }, 'a job could not be started')
        settle({
          state: 'failed',
          slug: 'internal',
          detail: 'The job could not be started. This has been logged; start it again.',
        })
      }
    }
    const end = await outcome
    clearTimeout(grace)
    await thread?.terminate()
    return end
  }

  /** Stores how it ended, if the lease is still ours. */
  async function store(end: End): Promise<void> {
    if (end.state === 'lost') return
    // All points before the end, so that who reads of the end has no more to expect.
    await beating
    await storePoints()
    await database.transaction(async (transaction) => {
      const held = await database.models.Job.findOne({
        where: { id: job.id, leaseOwner: lease, state: 'running' },
        transaction,
        lock: transaction.LOCK.UPDATE,
      })
      if (!held) return
      const ended = { endedAt: new Date(), changeNumber: (held.changeNumber ?? 0) + 1, leaseOwner: null, leaseUntil: null }
      // A cancel that came too late to stop anything still wins: the caller was told it would.
      if (end.state === 'cancelled' || held.cancelAt)
        await held.update({ ...ended, state: 'cancelled', message: 'Cancelled.' }, { transaction })
      else if (end.state === 'failed')
        await held.update(
          { ...ended, state: 'failed', message: 'Failed.', problem: { slug: end.slug, detail: end.detail } },
          { transaction },
        )
      else {
        const result = await storeOutput(job, end.output, transaction)
        await held.update(
          {
            ...ended,
            state: 'done',
            progress: 1,
            message: `Made version ${result.version} of ${result.model ?? result.loss}.`,
            result,
          },
          { transaction },
        )
      }
    })
  }

  /** A result that took minutes is not given up because the database is away for a moment. */
  async function storeSurely(end: End): Promise<void> {
    for (let attempt = 1; ; attempt++) {
      try {
        return await store(end)
      } catch (error) {
        if (error instanceof Refusal) return store({ state: 'failed', slug: error.kind.slug, detail: error.message })
        log.error({ err: error, jobId: job.id, attempt }, "a job's result could not be stored")
        if (attempt === storeAttempts)
          return store({
            state: 'failed',
            slug: 'internal',
            detail: 'The result could not be stored. This has been logged; start the job again.',
          })
        await sleep(1_000)
      }
    }
  }

  const ended = work()
    .then(storeSurely)
    .catch((error: unknown) => log.error({ err: error, jobId: job.id }, 'the end of a job could not be stored'))
    .finally(() => clearInterval(beat))

  return {
    jobId: job.id,
    lease,
    cancel,
    ended,
    async abandon() {
      settle({ state: 'failed', slug: 'internal', detail: 'The server was stopped while this job ran. Start the job again.' })
      await ended
    },
  }
}

/** The large arrays of an input, which move to the thread instead of being copied. */
function buffersOf(input: JobInput): ArrayBuffer[] {
  const motions =
    input.kind === 'fit' ? [...input.training, ...input.heldOut, ...input.validation] : [...input.training, ...input.validation]
  return motions.flatMap(({ time, states, torque }) => [time.buffer, states.buffer, torque.buffer] as ArrayBuffer[])
}

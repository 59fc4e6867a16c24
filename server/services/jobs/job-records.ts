import type { JobParameters } from '../../jobs/job-kinds.ts'
import type { Job, JobState } from '../../models/job.ts'

export interface JobRecord {
  readonly id: string
  readonly kind: JobParameters['kind']
  readonly state: JobState
  readonly progress: number
  readonly message: string
  readonly parameters: JobParameters
  readonly result: Job['result']
  readonly problem: Job['problem']
  /** Rises with every change. */
  readonly changeNumber: number
  readonly createdAt: Date
  readonly createdBy: string
  readonly startedAt: Date | null
  readonly endedAt: Date | null
}

/** One point of a training curve; `number` counts up within the job. */
export interface JobPoint {
  readonly number: number
  readonly series: string
  readonly x: number
  readonly y: number
}

export function jobRecord(job: Job): JobRecord {
  const {
    id,
    kind,
    state,
    progress,
    message,
    parameters,
    result,
    problem,
    changeNumber,
    createdAt,
    createdBy,
    startedAt,
    endedAt,
  } = job
  return {
    id,
    kind,
    state,
    progress,
    message,
    parameters,
    result: result ?? null,
    problem: problem ?? null,
    changeNumber: changeNumber ?? 1,
    createdAt,
    createdBy,
    startedAt: startedAt ?? null,
    endedAt: endedAt ?? null,
  }
}

export function hasEnded({ state }: { state: JobState }): boolean {
  return state === 'done' || state === 'failed' || state === 'cancelled'
}

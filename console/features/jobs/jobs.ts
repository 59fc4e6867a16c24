import { keepPreviousData, mutationOptions, queryOptions, type QueryClient } from '@tanstack/react-query'
import type { BodyOf, Schemas } from '../../../sdk/index.ts'
import { heftwise } from '../../lib/client.ts'
import { everything } from '../../lib/everything.ts'

export type Job = Schemas['Job']

type WithDefaults<T, Needed extends keyof T> = Pick<T, Needed> & Partial<T>
export type NewJob =
  WithDefaults<Schemas['NewFitJob'], 'kind' | 'model'> | WithDefaults<Schemas['NewMetaTrainJob'], 'kind' | 'loss'>

export function hasEnded(job: Job): boolean {
  return job.state === 'done' || job.state === 'failed' || job.state === 'cancelled'
}

export const jobKinds: Record<Job['kind'], string> = { fit: 'Fitting', meta_train: 'Meta-training' }

export const jobsOptions = queryOptions({
  queryKey: ['jobs'],
  queryFn: ({ signal }) => everything((cursor) => heftwise.jobs.list({ cursor, limit: 200, signal }), 1_000),
  refetchInterval: ({ state }) => (state.data?.items.some((job) => !hasEnded(job)) ? 1_500 : 10_000),
})

export const jobOptions = (id: string) =>
  queryOptions({
    queryKey: ['jobs', id],
    queryFn: ({ signal }) => heftwise.jobs.get(id, { signal }),
    refetchInterval: ({ state }) => (state.data && hasEnded(state.data) ? false : 1_000),
  })

export const curveOptions = (id: string, ended: boolean) =>
  queryOptions({
    queryKey: ['jobs', id, 'curve', ended],
    queryFn: ({ signal }) => heftwise.jobs.curve(id, { signal }),
    refetchInterval: ended ? false : 2_000,
    placeholderData: keepPreviousData,
  })

const refreshed = (client: QueryClient) => ({ onSettled: () => client.invalidateQueries({ queryKey: ['jobs'] }) })

export const createJobOptions = (client: QueryClient) =>
  mutationOptions({
    // The generated types also ask for what the contract has defaults for; those are the service's to fill in.
    mutationFn: (body: NewJob) => heftwise.jobs.create(body as BodyOf<'createJob'>),
    ...refreshed(client),
  })

export const cancelJobOptions = (client: QueryClient, id: string) =>
  mutationOptions({ mutationFn: (reason: string) => heftwise.jobs.cancel(id, reason), ...refreshed(client) })

/** What a job is about: the model it fits or the loss it learns. */
export function subjectOf(job: Job): string {
  const parameters = job.parameters as { model?: string; loss?: string }
  return parameters.loss ?? parameters.model ?? ''
}

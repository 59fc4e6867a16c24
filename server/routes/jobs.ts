import { once } from 'node:events'
import type { Server } from 'node:http'
import { setTimeout as sleep } from 'node:timers/promises'
import { Router, type Request, type Response } from 'express'
import { Refusal } from '../../shared/contract/problems.ts'
import type { components } from '../../shared/contract/openapi.generated.ts'
import type { JobParameters } from '../jobs/job-kinds.ts'
import type { Contract } from '../middleware/contract.ts'
import { answerPage } from '../middleware/page-answer.ts'
import { problemDocument } from '../middleware/problem-answer.ts'
import type { Services } from '../services/index.ts'
import type { JobRequest } from '../services/jobs/job-requests.ts'
import type { JobPoint, JobRecord } from '../services/jobs/job-records.ts'
import type { JobEvent, JobPosition, JobService } from '../services/jobs/jobs.ts'
import type { Caller } from '../services/permissions.ts'

type Schemas = components['schemas']

const pollMs = 300
const heartbeatMs = 10_000

export function jobRoutes({ jobs }: Services, contract: Contract): Router {
  const router = Router()

  router.get('/v1/jobs', contract.handle('listJobs', async ({ caller, query }, res, req) => {
    const page = await jobs.list(caller, { cursor: query.cursor, limit: query.limit!, kind: query.kind, state: query.state })
    answerPage(req, res, { ...page, items: page.items.map(jobToWire) })
  }))

  router.post('/v1/jobs', contract.handle('createJob', async ({ caller, body, requestId }, res) => {
    const job = await jobs.create(caller, requestFromWire(body), requestId)
    res.status(201).location(`/v1/jobs/${job.id}`).json(jobToWire(job))
  }))

  router.get('/v1/jobs/:job', contract.handle('getJob', async ({ caller, path }, res) => {
    res.json(jobToWire(await jobs.get(caller, path.job)))
  }))

  router.get('/v1/jobs/:job/curve', contract.handle('getJobCurve', async ({ caller, path }, res) => {
    res.json({ series: seriesOf(await jobs.curve(caller, path.job)) })
  }))

  router.post('/v1/jobs/:job/cancel', contract.handle('cancelJob', async ({ caller, path, body, requestId }, res) => {
    res.json(jobToWire(await jobs.cancel(caller, path.job, body.reason, requestId)))
  }))

  router.get('/v1/jobs/:job/events', contract.handle('streamJob', async ({ caller, path }, res, req) => {
    await stream(jobs, caller, path.job, req, res)
  }))

  return router
}

/** Server-sent events until the job has ended, the reader has gone, or the server stops listening. */
async function stream(jobs: JobService, caller: Caller, id: string, req: Request, res: Response): Promise<void> {
  let at = positionOf(req.headers['last-event-id'])
  // Refusals are answered as problems: nothing has been written yet.
  let news = await jobs.events(caller, id, at)
  res.status(200).setHeader('Content-Type', 'text/event-stream; charset=utf-8')
  // Proxies that gather answers would hold events back.
  res.setHeader('X-Accel-Buffering', 'no')
  res.flushHeaders()
  const { server } = req.socket as unknown as { server?: Server }
  let wroteAt = performance.now()
  for (;;) {
    for (const event of news.events) {
      at = event.kind === 'job' ? { ...at, changeNumber: event.job.changeNumber } : { ...at, pointNumber: event.point.number }
      if (!res.write(eventText(event, at))) await roomIn(res)
      wroteAt = performance.now()
    }
    if (news.ended || res.destroyed || server?.listening === false) break
    if (performance.now() - wroteAt > heartbeatMs) {
      res.write(': still here\n\n')
      wroteAt = performance.now()
    }
    await sleep(pollMs)
    if (res.destroyed) break
    news = await jobs.events(caller, id, at)
  }
  res.end()
}

/** Resolves when the reader has taken what was written, or has gone. */
async function roomIn(res: Response): Promise<void> {
  if (res.destroyed) return
  const settled = new AbortController()
  const { signal } = settled
  await Promise.race([once(res, 'drain', { signal }), once(res, 'close', { signal })]).finally(() => settled.abort())
}

function eventText(event: JobEvent, { changeNumber, pointNumber }: JobPosition): string {
  const data = event.kind === 'job' ? jobToWire(event.job) : { series: event.point.series, x: event.point.x, y: event.point.y }
  return `id: ${changeNumber}.${pointNumber}\nevent: ${event.kind}\ndata: ${JSON.stringify(data)}\n\n`
}

/** Where `Last-Event-ID` says that the reader was; the beginning when it says nothing of ours. */
function positionOf(id: string | string[] | undefined): JobPosition {
  const [, changeNumber, pointNumber] = /^(\d{1,9})\.(\d{1,9})$/.exec(String(id ?? '')) ?? [, '0', '0']
  return { changeNumber: Number(changeNumber), pointNumber: Number(pointNumber) }
}

function requestFromWire(body: Schemas['NewFitJob'] | Schemas['NewMetaTrainJob']): JobRequest {
  if (body.kind === 'fit') {
    const { held_out: heldOut, rows_per_step: rowsPerStep, ...rest } = body
    return { ...rest, heldOut, rowsPerStep }
  }
  const { inner_steps: innerSteps, rows_per_step: rowsPerStep, ...rest } = body
  return { ...rest, innerSteps, rowsPerStep }
}

function parametersToWire(parameters: JobParameters): Record<string, unknown> {
  if (parameters.kind === 'fit') {
    const { heldOut, rowsPerStep, ...rest } = parameters
    return { ...rest, held_out: heldOut, rows_per_step: rowsPerStep }
  }
  const { innerSteps, rowsPerStep, ...rest } = parameters
  return { ...rest, inner_steps: innerSteps, rows_per_step: rowsPerStep }
}

function jobToWire(job: JobRecord): Schemas['Job'] {
  return {
    id: job.id,
    kind: job.kind,
    state: job.state,
    progress: job.progress,
    message: job.message,
    parameters: parametersToWire(job.parameters),
    result: job.result,
    problem: job.problem && (problemDocument(new Refusal(job.problem.slug, job.problem.detail)) as Schemas['Problem']),
    created_at: job.createdAt.toISOString(),
    created_by: job.createdBy,
    started_at: job.startedAt?.toISOString() ?? null,
    ended_at: job.endedAt?.toISOString() ?? null,
  }
}

function seriesOf(points: readonly JobPoint[]): Schemas['JobCurve']['series'] {
  const series = new Map<string, number[][]>()
  for (const { series: name, x, y } of points) {
    const list = series.get(name) ?? []
    list.push([x, y])
    series.set(name, list)
  }
  return [...series].map(([name, list]) => ({ name, points: list }))
}

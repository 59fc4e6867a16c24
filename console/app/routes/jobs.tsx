import { useMutation, useQuery, useQueryClient } from '@tanstack/react-query'
import { useState } from 'react'
import { Button, TextLink } from '../../components/button.tsx'
import { DataTable, type Column } from '../../components/data-table.tsx'
import { Filter, Search } from '../../components/field.tsx'
import { Page } from '../../components/page.tsx'
import { ProgressBar } from '../../components/progress-bar.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { hasEnded, jobKinds, jobsOptions, subjectOf, type Job } from '../../features/jobs/jobs.ts'
import { JobStamp } from '../../features/jobs/job-stamp.tsx'
import { FitDialog } from '../../features/jobs/fit-dialog.tsx'
import { MetaTrainDialog } from '../../features/jobs/meta-train-dialog.tsx'
import { createLossOptions, learnedKinds, lossesOptions } from '../../features/losses/losses.ts'
import { modelsOptions } from '../../features/models/models.ts'
import { useBlocked } from '../../features/session/session.ts'
import { percent } from '../../lib/numbers.ts'
import { paths } from '../../lib/paths.ts'
import { span } from '../../lib/times.ts'
import { oneOf, useUrlState } from '../../lib/url-state.ts'

const states = ['queued', 'running', 'done', 'failed', 'cancelled'] as const
const kinds = ['fit', 'meta_train'] as const

const columns: Column<Job>[] = [
  {
    id: 'job',
    title: 'Job',
    by: (job) => `${job.kind} ${subjectOf(job)}`,
    cell: (job) => (
      <>
        <TextLink to={paths.job(job.id)} className="font-semibold">
          {jobKinds[job.kind]} of {subjectOf(job)}
        </TextLink>
        <span className="block text-12 text-soft">{job.message}</span>
      </>
    ),
  },
  { id: 'state', title: 'State', by: (job) => states.indexOf(job.state), cell: (job) => <JobStamp job={job} /> },
  {
    id: 'progress',
    title: 'Progress',
    by: (job) => job.progress,
    width: '10rem',
    cell: (job) => (
      <span className="flex items-center gap-3">
        <ProgressBar
          value={job.progress}
          label={`Progress of the ${jobKinds[job.kind].toLowerCase()} of ${subjectOf(job)}`}
          ended={hasEnded(job)}
        />
        <span className="num w-12 text-right text-12">{percent(job.progress)}</span>
      </span>
    ),
  },
  {
    id: 'took',
    title: 'Took',
    right: true,
    minor: true,
    by: duration,
    cell: (job) => <span className="num">{duration(job) === null ? '–' : span(duration(job)!)}</span>,
  },
  { id: 'by', title: 'By', minor: true, by: (job) => job.created_by, cell: (job) => job.created_by },
  { id: 'at', title: 'Asked for', by: (job) => job.created_at, cell: (job) => <TimeAgo at={job.created_at} /> },
]

function duration(job: Job): number | null {
  return job.started_at === null || job.ended_at === null ? null : Date.parse(job.ended_at) - Date.parse(job.started_at)
}

export function Component() {
  const url = useUrlState()
  const jobs = useQuery(jobsOptions)
  const client = useQueryClient()
  const models = useQuery(modelsOptions)
  const losses = useQuery(lossesOptions)
  const makeLoss = useMutation(createLossOptions(client))
  const blocked = useBlocked('build', 'start jobs')
  const [starting, setStarting] = useState<Job['kind']>()
  const open = (models.data?.items ?? []).filter((model) => model.archived_at === null).map((model) => model.name)
  const noModel = blocked ?? (models.data && open.length === 0 ? 'Start a model first.' : undefined)
  const state = oneOf(url.get('state'), states)
  const kind = oneOf(url.get('kind'), kinds)
  const text = url.get('text')
  const rows = (jobs.data?.items ?? []).filter(
    (job) =>
      (state === undefined || job.state === state) &&
      (kind === undefined || job.kind === kind) &&
      (text === undefined || `${subjectOf(job)} ${job.created_by}`.toLowerCase().includes(text.toLowerCase())),
  )
  return (
    <Page
      title="Jobs"
      facts="Fitting makes a version of a model, meta-training a version of a loss."
      actions={
        <>
          <Button look="primary" icon="plus" blocked={noModel} onClick={() => setStarting('fit')}>
            Fit…
          </Button>
          <Button icon="plus" blocked={noModel} onClick={() => setStarting('meta_train')}>
            Meta-train…
          </Button>
        </>
      }
    >
      {jobs.isPending ? (
        <SkeletonRows rows={6} label="Loading jobs" />
      ) : !jobs.data ? (
        <Failed what="The jobs could not be read" error={jobs.error} retry={() => void jobs.refetch()} />
      ) : jobs.data.items.length === 0 ? (
        <Empty
          title="No job yet"
          action={
            <a className="underline underline-offset-3" href={paths.docs()}>
              Jobs in the API
            </a>
          }
        >
          Once recordings of an arm are there and a model of it is started, fit a first version: progress, curves and result are
          shown here.
        </Empty>
      ) : (
        <div>
          <div className="mb-4 flex flex-wrap gap-x-6 gap-y-2">
            <Filter
              label="State"
              value={state}
              onChange={(value) => url.set({ state: value, page: undefined })}
              options={states.map((value) => ({ value, label: value }))}
            />
            <Filter
              label="Kind"
              value={kind}
              onChange={(value) => url.set({ kind: value, page: undefined })}
              options={kinds.map((value) => ({ value, label: jobKinds[value].toLowerCase() }))}
            />
            <Search label="Model, loss, person" value={text} onChange={(value) => url.set({ text: value, page: undefined })} />
          </div>
          {rows.length === 0 ? (
            <Empty title="No job fits these filters" action={<TextLink to={paths.jobs()}>Show all</TextLink>} />
          ) : (
            <DataTable
              label="Jobs"
              columns={columns}
              rows={rows}
              rowKey={(job) => job.id}
              sort="-at"
              complete={jobs.data.complete}
            />
          )}
        </div>
      )}
      {starting === 'fit' && <FitDialog models={open} onClose={() => setStarting(undefined)} />}
      {starting === 'meta_train' && (
        <MetaTrainDialog
          losses={(losses.data?.items ?? []).filter((loss) => loss.kind !== 'mse')}
          models={open}
          kinds={learnedKinds}
          createLoss={makeLoss.mutateAsync}
          onClose={() => setStarting(undefined)}
        />
      )}
    </Page>
  )
}

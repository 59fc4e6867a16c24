import { useQuery } from '@tanstack/react-query'
import { useState, type ReactNode } from 'react'
import { useParams } from 'react-router-dom'
import { Button, TextLink } from '../../components/button.tsx'
import { Facts, Page, Section } from '../../components/page.tsx'
import { LineChart } from '../../components/plot/line-chart.tsx'
import { ProgressBar } from '../../components/progress-bar.tsx'
import { Failed, Skeleton, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { CancelJobDialog } from '../../features/jobs/cancel-dialog.tsx'
import { curveOptions, hasEnded, jobKinds, jobOptions, subjectOf, type Job } from '../../features/jobs/jobs.ts'
import { JobStamp } from '../../features/jobs/job-stamp.tsx'
import { useBlocked } from '../../features/session/session.ts'
import { counted, percent } from '../../lib/numbers.ts'
import { paths } from '../../lib/paths.ts'
import { span } from '../../lib/times.ts'

export function Component() {
  const { job: id } = useParams()
  const job = useQuery(jobOptions(id!))
  const [cancelling, setCancelling] = useState(false)
  const blocked = useBlocked('build', 'cancel jobs')
  if (!job.data) {
    return (
      <Page title="Job" above={{ to: paths.jobs(), label: 'Jobs' }}>
        {job.isError ? (
          <Failed what="This job could not be read" error={job.error} retry={() => void job.refetch()} />
        ) : (
          <SkeletonRows rows={6} label="Loading the job" />
        )}
      </Page>
    )
  }
  const { data } = job
  const ended = hasEnded(data)
  return (
    <Page
      title={`${jobKinds[data.kind]} of ${subjectOf(data)}`}
      above={{ to: paths.jobs(), label: 'Jobs' }}
      state={<JobStamp job={data} />}
      facts={data.message}
      actions={
        ended ? null : (
          <Button look="stop" blocked={blocked} onClick={() => setCancelling(true)}>
            Cancel…
          </Button>
        )
      }
    >
      <div className="flex items-center gap-4">
        <ProgressBar value={data.progress} label="Progress" ended={ended} />
        <span className="num w-12 text-right">{percent(data.progress)}</span>
      </div>
      {data.problem !== null && (
        <div className="border-l-4 border-stop pl-4">
          <p className="font-semibold">{data.problem.title}</p>
          <p>{data.problem.detail}</p>
        </div>
      )}
      <Curves id={data.id} kind={data.kind} ended={ended} />
      <div className="grid gap-x-12 gap-y-8 lg:grid-cols-2">
        <Section title="Result">
          <Facts
            items={[
              ['Made', <Result key="result" job={data} />],
              [
                'Asked for',
                <>
                  {data.created_by}, <TimeAgo at={data.created_at} />
                </>,
              ],
              ['Started', data.started_at === null ? 'not yet' : <TimeAgo at={data.started_at} />],
              ['Ended', data.ended_at === null ? 'not yet' : <TimeAgo at={data.ended_at} />],
              ...(data.started_at !== null && data.ended_at !== null
                ? ([['Took', span(Date.parse(data.ended_at) - Date.parse(data.started_at))]] as [string, ReactNode][])
                : []),
            ]}
          />
        </Section>
        <Section title="Asked for" note="with defaults filled in">
          <Facts
            items={Object.entries(data.parameters)
              .filter(([name]) => name !== 'kind')
              .map(([name, value]) => [
                name.replaceAll('_', ' '),
                <span key={name} className="num">
                  {shown(value)}
                </span>,
              ])}
          />
        </Section>
      </div>
      {cancelling && <CancelJobDialog job={data} onClose={() => setCancelling(false)} />}
    </Page>
  )
}

function shown(value: unknown): string {
  if (Array.isArray(value))
    return value.length > 6 || value.some((each) => typeof each === 'string')
      ? counted(value.length, 'entry', 'entries')
      : value.join(', ')
  return value !== null && typeof value === 'object' ? JSON.stringify(value) : String(value)
}

function Result({ job }: { job: Job }) {
  const { result } = job
  if (result?.model !== undefined)
    return (
      <TextLink to={paths.model(result.model, { version: result.version })}>
        version {result.version} of {result.model}
      </TextLink>
    )
  if (result?.loss !== undefined)
    return (
      <TextLink to={paths.loss(result.loss, { version: result.version })}>
        version {result.version} of loss {result.loss}
      </TextLink>
    )
  return job.state === 'running' || job.state === 'queued' ? <>nothing yet</> : <>nothing</>
}

function Curves({ id, kind, ended }: { id: string; kind: Job['kind']; ended: boolean }) {
  const curve = useQuery(curveOptions(id, ended))
  const points = curve.data?.series.reduce((sum, series) => sum + series.points.length, 0) ?? 0
  return (
    <Section title="Curves">
      {curve.isPending ? (
        <Skeleton className="h-64 w-full" />
      ) : !curve.data ? (
        <Failed what="The curves could not be read" error={curve.error} retry={() => void curve.refetch()} />
      ) : points === 0 ? (
        <p className="border-y border-line py-3 text-soft">
          {ended ? 'It ended before a first point.' : 'The first point comes with the first step.'}
        </p>
      ) : (
        <LineChart
          label={`Training curves of the ${jobKinds[kind].toLowerCase()}`}
          xName={kind === 'fit' ? 'epoch' : 'update'}
          yName="error"
          series={curve.data.series.map(({ name, points: each }) => ({
            name: name.replaceAll('_', ' '),
            points: each as [number, number][],
          }))}
        />
      )}
    </Section>
  )
}

import { useQuery } from '@tanstack/react-query'
import { TextLink } from '../../components/button.tsx'
import { Icon } from '../../components/icon.tsx'
import { Page, Section } from '../../components/page.tsx'
import { ProgressBar } from '../../components/progress-bar.tsx'
import { Stamp } from '../../components/stamp.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { runningOptions } from '../../features/adaptations/adaptations.ts'
import { attentionOf, healthOf, urgency } from '../../features/adaptations/health.ts'
import { RobotList } from '../../features/adaptations/robot-list.tsx'
import { hasEnded, jobKinds, jobsOptions, subjectOf } from '../../features/jobs/jobs.ts'
import { JobStamp } from '../../features/jobs/job-stamp.tsx'
import { modelsOptions } from '../../features/models/models.ts'
import { useMay } from '../../features/session/session.ts'
import { counted, percent } from '../../lib/numbers.ts'
import { paths } from '../../lib/paths.ts'
import { exact, span, useNow } from '../../lib/times.ts'

export function Component() {
  return (
    <Page title="Overview">
      <Robots />
      <div className="grid gap-x-12 gap-y-8 lg:grid-cols-2">
        <LiveVersions />
        <RunningJobs />
      </div>
    </Page>
  )
}

/** Each row asks for its trend; beyond this many the list of adaptations is the better place. */
const most = 40

function Robots() {
  const adaptations = useQuery(runningOptions)
  const now = useNow()
  if (adaptations.isPending)
    return (
      <Section title="Robots">
        <SkeletonRows rows={6} label="Loading adaptations" />
      </Section>
    )
  if (!adaptations.data)
    return (
      <Section title="Robots">
        <Failed what="The adaptations could not be read" error={adaptations.error} retry={() => void adaptations.refetch()} />
      </Section>
    )
  const running = adaptations.data
    .map((adaptation) => ({ adaptation, health: healthOf(adaptation, now) }))
    .sort(
      (a, b) =>
        urgency(a.health) - urgency(b.health) ||
        a.adaptation.robot.localeCompare(b.adaptation.robot, undefined, { numeric: true }),
    )
  const asking = running.filter(({ health }) => health.state !== 'adapting')
  if (running.length === 0)
    return (
      <Section title="Robots">
        <Empty
          title="No robot is adapting"
          action={
            <a className="underline underline-offset-3" href={paths.docs()}>
              How to start one
            </a>
          }
        >
          A robot’s controller starts an adaptation of the live version with its key (scope adapt), then posts what the arm did,
          batch by batch. It shows up here at once.
        </Empty>
      </Section>
    )
  return (
    <>
      {adaptations.isError && <Unreached since={adaptations.dataUpdatedAt} />}
      <Section title="Needs attention">
        {asking.length === 0 ? (
          <p className="flex items-center gap-2 border-y border-line py-3">
            <Icon name="check" className="text-live" /> All {counted(running.length, 'robot')} adapt, with steps accepted.
          </p>
        ) : (
          <ul className="border-t border-edge">
            {asking.map(({ adaptation, health }) => (
              <li
                key={adaptation.id}
                className={`flex flex-wrap items-baseline gap-x-4 gap-y-1 border-b border-line border-l-4 py-2.5 pl-3 ${health.state === 'frozen' ? 'border-l-stop' : 'border-l-load-fill'}`}
              >
                <TextLink to={paths.adaptation(adaptation.id)} className="font-semibold">
                  {adaptation.robot}
                </TextLink>
                <span className="grow">{attentionOf(adaptation, health)}</span>
                {health.state === 'frozen' && <TimeAgo at={health.at} className="text-12 text-soft" />}
              </li>
            ))}
          </ul>
        )}
      </Section>
      <Section
        title="Robots"
        note={`${counted(running.length, 'adaptation')} running`}
        actions={<TextLink to={paths.adaptations()}>all adaptations</TextLink>}
      >
        <RobotList robots={running.slice(0, most)} />
        {running.length > most && (
          <p className="mt-2 text-12 text-soft">
            The {most} that most need a look; <TextLink to={paths.adaptations()}>{running.length - most} more</TextLink>.
          </p>
        )}
      </Section>
    </>
  )
}

function Unreached({ since }: { since: number }) {
  const now = useNow()
  return (
    <p role="alert" className="border-l-4 border-load-fill bg-load-wash px-3 py-2">
      The service has not answered for {span(now - since)}. What you see is from{' '}
      <span title={exact(new Date(since).toISOString())}>then</span>; it goes on by itself once the service answers.
    </p>
  )
}

function LiveVersions() {
  const models = useQuery(modelsOptions)
  return (
    <Section title="Live versions" actions={<TextLink to={paths.models()}>all models</TextLink>}>
      {models.isPending ? (
        <SkeletonRows rows={3} label="Loading models" />
      ) : !models.data ? (
        <Failed what="The models could not be read" error={models.error} retry={() => void models.refetch()} />
      ) : models.data.items.every((model) => model.archived_at !== null) ? (
        <Empty title="No model yet">A model belongs to an arm and gets its versions by fitting, import or promotion.</Empty>
      ) : (
        <ul className="border-t border-edge">
          {models.data.items
            .filter((model) => model.archived_at === null)
            .map((model) => (
              <li key={model.id} className="flex flex-wrap items-baseline gap-x-4 gap-y-1 border-b border-line py-2.5">
                <TextLink to={paths.model(model.name)} className="font-semibold">
                  {model.name}
                </TextLink>
                <span className="num text-12 text-soft">{model.arm}</span>
                <span className="ml-auto flex items-baseline gap-3">
                  {model.live_version === null ? (
                    <Stamp tone="soft" mark="ring">
                      nothing live
                    </Stamp>
                  ) : (
                    <Stamp tone="live" mark="dot">
                      version {model.live_version}
                    </Stamp>
                  )}
                  {model.live_since !== null && (
                    <TimeAgo at={model.live_since} className="min-w-20 text-right text-12 text-soft" />
                  )}
                </span>
              </li>
            ))}
        </ul>
      )}
    </Section>
  )
}

function RunningJobs() {
  const jobs = useQuery(jobsOptions)
  const may = useMay('read')
  if (!may) return null
  const items = jobs.data?.items ?? []
  const running = items.filter((job) => !hasEnded(job))
  const latest = items.find(hasEnded)
  return (
    <Section title="Jobs" actions={<TextLink to={paths.jobs()}>all jobs</TextLink>}>
      {jobs.isPending ? (
        <SkeletonRows rows={2} label="Loading jobs" />
      ) : !jobs.data ? (
        <Failed what="The jobs could not be read" error={jobs.error} retry={() => void jobs.refetch()} />
      ) : running.length === 0 ? (
        <p className="border-y border-line py-3">
          None is running.{' '}
          {latest && (
            <span className="text-soft">
              Last:{' '}
              <TextLink to={paths.job(latest.id)}>
                {jobKinds[latest.kind].toLowerCase()} of {subjectOf(latest)}
              </TextLink>
              , {latest.state} {latest.ended_at !== null && <TimeAgo at={latest.ended_at} />}
            </span>
          )}
        </p>
      ) : (
        <ul className="border-t border-edge">
          {running.map((job) => (
            <li key={job.id} className="border-b border-line py-2.5">
              <div className="mb-2 flex flex-wrap items-baseline gap-x-4">
                <TextLink to={paths.job(job.id)} className="font-semibold">
                  {jobKinds[job.kind]} of {subjectOf(job)}
                </TextLink>
                <span className="text-12 text-soft">{job.message}</span>
                <span className="ml-auto flex gap-3">
                  <JobStamp job={job} />
                  <span className="num">{percent(job.progress)}</span>
                </span>
              </div>
              <ProgressBar
                value={job.progress}
                label={`Progress of the ${jobKinds[job.kind].toLowerCase()} of ${subjectOf(job)}`}
              />
            </li>
          ))}
        </ul>
      )}
    </Section>
  )
}

import { useQuery, useQueryClient } from '@tanstack/react-query'
import { useState, type ReactNode } from 'react'
import { useParams } from 'react-router-dom'
import { Button, TextLink, Toggle } from '../../components/button.tsx'
import { Page, Section } from '../../components/page.tsx'
import { Empty, Failed, Skeleton, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { adaptationOptions, historyOptions, type Adaptation, type Command } from '../../features/adaptations/adaptations.ts'
import { BatchView } from '../../features/adaptations/batch-view.tsx'
import { CommandDialog, PromoteDialog } from '../../features/adaptations/command-dialog.tsx'
import { ContextSection } from '../../features/adaptations/context-section.tsx'
import { ErrorChart } from '../../features/adaptations/error-chart.tsx'
import { GuardPanel } from '../../features/adaptations/guard-panel.tsx'
import { attentionOf, healthOf, lossName, schemeNames, type Health } from '../../features/adaptations/health.ts'
import { HealthStamp } from '../../features/adaptations/health-stamp.tsx'
import { LogSection } from '../../features/adaptations/log-table.tsx'
import { useBlocked, useMay } from '../../features/session/session.ts'
import { paths } from '../../lib/paths.ts'
import { span, useNow } from '../../lib/times.ts'
import { useUrlState } from '../../lib/url-state.ts'

export function Component() {
  const { adaptation: id } = useParams()
  const adaptation = useQuery(adaptationOptions(id!))
  const now = useNow()
  if (!adaptation.data) {
    return (
      <Page title="Adaptation" above={{ to: paths.adaptations(), label: 'Adaptations' }}>
        {adaptation.isError ? (
          <Failed what="This adaptation could not be read" error={adaptation.error} retry={() => void adaptation.refetch()} />
        ) : (
          <SkeletonRows rows={8} label="Loading the adaptation" />
        )}
      </Page>
    )
  }
  const { data } = adaptation
  const health = healthOf(data, now)
  return (
    <Page
      title={data.robot}
      above={{ to: paths.adaptations(), label: 'Adaptations' }}
      state={<HealthStamp health={health} />}
      actions={<Acts adaptation={data} />}
      facts={
        <>
          <TextLink to={paths.model(data.model, { version: data.version })}>
            {data.model} {data.version}
          </TextLink>
          , loss <LossLink loss={data.loss} />, {schemeNames[data.scheme]}, {data.update.kind}. Serves revision{' '}
          <span className="num text-ink">{data.revision}</span>;{' '}
          {data.last_batch === null ? (
            'no batch heard yet.'
          ) : (
            <>
              last heard <TimeAgo at={data.last_batch.at} className="text-ink" />.
            </>
          )}
        </>
      }
    >
      <div className="flex flex-col gap-2 empty:hidden">
        {adaptation.isError && (
          <Banner tone="load">
            The service has not answered for {span(now - adaptation.dataUpdatedAt)}. What you see is from then; the robot may be
            elsewhere by now.
          </Banner>
        )}
        <Attention adaptation={data} health={health} />
      </div>
      <Live adaptation={data} />
      <LogSection id={data.id} ended={data.state === 'ended'} />
    </Page>
  )
}

function LossLink({ loss }: { loss: Adaptation['loss'] }) {
  if (typeof loss === 'string') return <>{loss}</>
  return <TextLink to={paths.loss(loss.name, { version: loss.version })}>{lossName(loss)}</TextLink>
}

function Banner({ tone, children }: { tone: 'load' | 'stop'; children: ReactNode }) {
  return (
    <p
      role="status"
      className={`border-l-4 px-3 py-2 ${tone === 'stop' ? 'border-stop bg-stop-wash' : 'border-load-fill bg-load-wash'}`}
    >
      {children}
    </p>
  )
}

function Attention({ adaptation, health }: { adaptation: Adaptation; health: Health }) {
  const words = attentionOf(adaptation, health)
  if (adaptation.state === 'ended')
    return (
      <Banner tone="load">
        It has ended {adaptation.ended_at !== null && <TimeAgo at={adaptation.ended_at} />}; it serves and takes nothing more. Its
        log stays.
      </Banner>
    )
  if (words === undefined) return null
  return (
    <Banner tone={health.state === 'frozen' ? 'stop' : 'load'}>
      {words}
      {health.state === 'frozen' && (
        <>
          {' '}
          (<TimeAgo at={health.at} />)
        </>
      )}
    </Banner>
  )
}

function Acts({ adaptation }: { adaptation: Adaptation }) {
  const [act, setAct] = useState<Command | 'promote'>()
  const freeze = useBlocked('freeze', 'freeze adaptations')
  const resume = useBlocked('resume', 'resume adaptations')
  const reset = useBlocked('reset', 'reset adaptations')
  const end = useBlocked('adapt', 'end adaptations')
  const mayPromote = useMay('build')
  const close = () => setAct(undefined)
  const untouched = adaptation.revision === 0 ? 'It still serves its base version; there is nothing to take.' : undefined
  return (
    <>
      {adaptation.state === 'adapting' && (
        <Button look="stop" blocked={freeze} onClick={() => setAct('freeze')}>
          Freeze…
        </Button>
      )}
      {adaptation.state === 'frozen' && (
        <Button look="primary" blocked={resume} onClick={() => setAct('resume')}>
          Resume…
        </Button>
      )}
      {adaptation.state !== 'ended' && (
        <Button blocked={reset ?? untouched} onClick={() => setAct('reset')}>
          Reset…
        </Button>
      )}
      {mayPromote && (
        <Button blocked={untouched} onClick={() => setAct('promote')}>
          Promote…
        </Button>
      )}
      {adaptation.state !== 'ended' && (
        <Button look="stop" blocked={end} onClick={() => setAct('end')}>
          End…
        </Button>
      )}
      {act === 'promote' && <PromoteDialog adaptation={adaptation} onClose={close} />}
      {act !== undefined && act !== 'promote' && <CommandDialog adaptation={adaptation} command={act} onClose={close} />}
    </>
  )
}

const windows = [
  { value: '50', label: '50' },
  { value: '150', label: '150' },
  { value: '600', label: '600' },
]

function Live({ adaptation }: { adaptation: Adaptation }) {
  const url = useUrlState()
  const ended = adaptation.state === 'ended'
  const history = useQuery(historyOptions(useQueryClient(), adaptation.id, ended))
  const shown = Number(url.get('newest')) || 150
  if (history.isPending) return <Skeleton className="h-80 w-full" />
  if (!history.data) return <Failed what="The log could not be read" error={history.error} retry={() => void history.refetch()} />
  const entries = history.data.slice(-shown)
  const batches = entries.filter((entry) => entry.entry === 'batch')
  if (batches.length === 0)
    return (
      <>
        <Empty title="No batch yet">
          It serves version {adaptation.version} unchanged until its controller posts what the arm did; the first batch carries
          sequence {adaptation.next_sequence}.
        </Empty>
        <ContextSection adaptation={adaptation} history={history.data} />
      </>
    )
  const selected = Number(url.get('batch')) || undefined
  return (
    <>
      <Section
        title="Error per batch"
        note="mean squared, in base standard deviations"
        actions={
          <fieldset className="flex items-center gap-1 text-12 text-soft">
            <legend className="sr-only">How many entries are shown</legend>
            newest
            {windows.map((each) => (
              <Toggle
                key={each.value}
                pressed={shown === Number(each.value)}
                onPress={() => url.set({ newest: each.value === '150' ? undefined : each.value })}
              >
                <span className="num">{each.label}</span>
              </Toggle>
            ))}
          </fieldset>
        }
      >
        <ErrorChart
          entries={entries}
          frozenNow={adaptation.state === 'frozen'}
          selected={selected}
          onSelect={(position) => url.set({ batch: String(position) }, { push: true })}
        />
      </Section>
      <BatchView adaptation={adaptation} history={history.data} selected={selected} />
      <div className="grid gap-x-12 gap-y-8 lg:grid-cols-[3fr_2fr]">
        <Section title="Guards">
          <GuardPanel adaptation={adaptation} history={batches} />
        </Section>
        <ContextSection adaptation={adaptation} history={history.data} />
      </div>
    </>
  )
}

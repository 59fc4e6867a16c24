import { useQuery } from '@tanstack/react-query'
import { TextLink } from '../../components/button.tsx'
import { DataTable, type Column } from '../../components/data-table.tsx'
import { Filter, Search } from '../../components/field.tsx'
import { Page } from '../../components/page.tsx'
import { Quantity } from '../../components/quantity.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { adaptationsOptions, type Adaptation } from '../../features/adaptations/adaptations.ts'
import { healthOf, lossName, urgency, type Health } from '../../features/adaptations/health.ts'
import { HealthStamp } from '../../features/adaptations/health-stamp.tsx'
import { paths } from '../../lib/paths.ts'
import { useNow } from '../../lib/times.ts'
import { oneOf, useUrlState } from '../../lib/url-state.ts'

const states = ['adapting', 'rejecting', 'silent', 'frozen', 'ended'] as const

interface Row {
  adaptation: Adaptation
  health: Health
}

const columns: Column<Row>[] = [
  {
    id: 'robot',
    title: 'Robot',
    by: ({ adaptation }) => adaptation.robot,
    cell: ({ adaptation }) => (
      <>
        <TextLink to={paths.adaptation(adaptation.id)} className="font-semibold break-words">
          {adaptation.robot}
        </TextLink>
        <span className="block text-12 text-soft">
          {[adaptation.context.tool, adaptation.context.payload_class].filter(Boolean).join(', ')}
        </span>
      </>
    ),
  },
  { id: 'state', title: 'State', by: ({ health }) => urgency(health), cell: ({ health }) => <HealthStamp health={health} /> },
  {
    id: 'error',
    title: 'Error now',
    right: true,
    by: ({ adaptation }) => adaptation.last_batch?.error?.before ?? null,
    cell: ({ adaptation }) => <Quantity value={adaptation.last_batch?.error?.before} missing="no batch yet" />,
  },
  {
    id: 'model',
    title: 'Model, loss',
    by: ({ adaptation }) => `${adaptation.model} ${adaptation.version}`,
    cell: ({ adaptation }) => (
      <>
        <TextLink to={paths.model(adaptation.model, { version: adaptation.version })}>
          {adaptation.model} {adaptation.version}
        </TextLink>
        <span className="block text-12 text-soft">{lossName(adaptation.loss)}</span>
      </>
    ),
  },
  {
    id: 'revision',
    title: 'Revision',
    right: true,
    minor: true,
    by: ({ adaptation }) => adaptation.revision,
    cell: ({ adaptation }) => <span className="num">{adaptation.revision}</span>,
  },
  {
    id: 'heard',
    title: 'Last heard',
    by: ({ adaptation }) => adaptation.last_batch?.at ?? null,
    cell: ({ adaptation }) =>
      adaptation.last_batch === null ? <span className="text-soft">never</span> : <TimeAgo at={adaptation.last_batch.at} />,
  },
  {
    id: 'started',
    title: 'Started',
    minor: true,
    by: ({ adaptation }) => adaptation.created_at,
    cell: ({ adaptation }) => (
      <>
        <TimeAgo at={adaptation.created_at} />
        <span className="block text-12 text-soft">{adaptation.created_by}</span>
      </>
    ),
  },
]

export function Component() {
  const url = useUrlState()
  const now = useNow()
  const adaptations = useQuery(adaptationsOptions)
  const state = oneOf(url.get('state'), states)
  const model = url.get('model')
  const text = url.get('text')
  const filtered = state !== undefined || model !== undefined || text !== undefined
  const rows = (adaptations.data?.items ?? [])
    .map((adaptation) => ({ adaptation, health: healthOf(adaptation, now) }))
    .filter(
      ({ adaptation, health }) =>
        (state === undefined || health.state === state) &&
        (model === undefined || adaptation.model === model) &&
        (text === undefined || matches(adaptation, text)),
    )
  const models = [...new Set(adaptations.data?.items.map((adaptation) => adaptation.model))].sort()
  return (
    <Page title="Adaptations">
      {adaptations.isPending ? (
        <SkeletonRows rows={10} label="Loading adaptations" />
      ) : !adaptations.data ? (
        <Failed what="The adaptations could not be read" error={adaptations.error} retry={() => void adaptations.refetch()} />
      ) : adaptations.data.items.length === 0 ? (
        <Empty
          title="No adaptation yet"
          action={
            <a className="underline underline-offset-3" href={paths.docs()}>
              How to start one
            </a>
          }
        >
          A robot’s controller starts one with its key (scope adapt) and posts what the arm did, batch by batch.
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
              label="Model"
              value={model}
              onChange={(value) => url.set({ model: value, page: undefined })}
              options={models.map((value) => ({ value, label: value }))}
            />
            <Search label="Robot, tool, payload" value={text} onChange={(value) => url.set({ text: value, page: undefined })} />
          </div>
          {rows.length === 0 && filtered ? (
            <Empty title="No adaptation fits these filters" action={<TextLink to={paths.adaptations()}>Show all</TextLink>} />
          ) : (
            <DataTable
              label="Adaptations"
              columns={columns}
              rows={rows}
              rowKey={({ adaptation }) => adaptation.id}
              sort="state"
              complete={adaptations.data.complete}
            />
          )}
        </div>
      )}
    </Page>
  )
}

function matches({ robot, context }: Adaptation, text: string): boolean {
  return [robot, ...Object.values(context)].some((each) => each.toLowerCase().includes(text.toLowerCase()))
}

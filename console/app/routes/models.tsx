import { useQuery } from '@tanstack/react-query'
import { useState } from 'react'
import { Button, TextLink } from '../../components/button.tsx'
import { DataTable, type Column } from '../../components/data-table.tsx'
import { Filter, Search } from '../../components/field.tsx'
import { Page } from '../../components/page.tsx'
import { Stamp } from '../../components/stamp.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { armsOptions } from '../../features/arms/arms.ts'
import { modelsOptions, type Model } from '../../features/models/models.ts'
import { NewModelDialog } from '../../features/models/new-model-dialog.tsx'
import { useBlocked } from '../../features/session/session.ts'
import { paths } from '../../lib/paths.ts'
import { oneOf, useUrlState } from '../../lib/url-state.ts'

const states = ['live', 'nothing live', 'archived'] as const

function stateOf(model: Model): (typeof states)[number] {
  if (model.archived_at !== null) return 'archived'
  return model.live_version === null ? 'nothing live' : 'live'
}

const columns: Column<Model>[] = [
  {
    id: 'name',
    title: 'Model',
    by: (model) => model.name,
    cell: (model) => (
      <>
        <TextLink to={paths.model(model.name)} className="font-semibold">
          {model.name}
        </TextLink>
        {model.description !== '' && <span className="block text-12 text-soft">{model.description}</span>}
      </>
    ),
  },
  { id: 'arm', title: 'Arm', by: (model) => model.arm, cell: (model) => <span className="num">{model.arm}</span> },
  {
    id: 'state',
    title: 'Live',
    by: (model) => states.indexOf(stateOf(model)),
    cell: (model) => {
      const state = stateOf(model)
      if (state === 'archived')
        return (
          <Stamp tone="soft" mark="bar">
            archived
          </Stamp>
        )
      return state === 'live' ? (
        <Stamp tone="live" mark="dot">
          version {model.live_version}
        </Stamp>
      ) : (
        <Stamp tone="soft" mark="ring">
          nothing live
        </Stamp>
      )
    },
  },
  {
    id: 'since',
    title: 'Since',
    by: (model) => model.live_since,
    cell: (model) => (model.live_since === null ? <span className="text-soft">–</span> : <TimeAgo at={model.live_since} />),
  },
  {
    id: 'newest',
    title: 'Newest version',
    right: true,
    by: (model) => model.newest_version,
    cell: (model) =>
      model.newest_version === null ? (
        <span className="text-soft">none</span>
      ) : (
        <TextLink to={paths.model(model.name, { version: model.newest_version })} className="num">
          {model.newest_version}
        </TextLink>
      ),
  },
  {
    id: 'made',
    title: 'Made',
    minor: true,
    by: (model) => model.created_at,
    cell: (model) => (
      <>
        {model.created_by}, <TimeAgo at={model.created_at} />
      </>
    ),
  },
]

export function Component() {
  const url = useUrlState()
  const models = useQuery(modelsOptions)
  const described = useQuery(armsOptions)
  const blocked = useBlocked('build', 'start models')
  const [starting, setStarting] = useState(false)
  const state = oneOf(url.get('state'), states)
  const arm = url.get('arm')
  const text = url.get('text')
  const all = models.data?.items ?? []
  const rows = all.filter(
    (model) =>
      (state === undefined ? model.archived_at === null : stateOf(model) === state) &&
      (arm === undefined || model.arm === arm) &&
      (text === undefined || `${model.name} ${model.description}`.toLowerCase().includes(text.toLowerCase())),
  )
  const known = (described.data?.items ?? []).filter((each) => each.archived_at === null).map((each) => each.name)
  const arms = [...new Set(all.map((model) => model.arm))].sort()
  return (
    <Page
      title="Models"
      facts="What an arm’s torque is, by version. The live one answers every request that names none."
      actions={
        <Button
          look="primary"
          icon="plus"
          blocked={blocked ?? (described.data && known.length === 0 ? 'Describe the arm through the API first.' : undefined)}
          onClick={() => setStarting(true)}
        >
          Start a model…
        </Button>
      }
    >
      {models.isPending ? (
        <SkeletonRows rows={6} label="Loading models" />
      ) : !models.data ? (
        <Failed what="The models could not be read" error={models.error} retry={() => void models.refetch()} />
      ) : all.length === 0 ? (
        <Empty
          title="No model yet"
          action={
            <a className="underline underline-offset-3" href={paths.docs()}>
              Models in the API
            </a>
          }
        >
          Describe the arm and start a model of it through the API; upload recordings, and fit a first version.
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
              label="Arm"
              value={arm}
              onChange={(value) => url.set({ arm: value, page: undefined })}
              options={arms.map((value) => ({ value, label: value }))}
            />
            <Search label="Name" value={text} onChange={(value) => url.set({ text: value, page: undefined })} />
          </div>
          {rows.length === 0 ? (
            <Empty title="No model fits these filters" action={<TextLink to={paths.models()}>Show all</TextLink>} />
          ) : (
            <DataTable
              label="Models"
              columns={columns}
              rows={rows}
              rowKey={(model) => model.id}
              sort="name"
              complete={models.data.complete}
            />
          )}
        </div>
      )}
      {starting && <NewModelDialog arms={known} onClose={() => setStarting(false)} />}
    </Page>
  )
}

import { useQuery } from '@tanstack/react-query'
import { TextLink } from '../../components/button.tsx'
import { DataTable, type Column } from '../../components/data-table.tsx'
import { Filter, Search } from '../../components/field.tsx'
import { Page } from '../../components/page.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { kindNames, learnedKinds, lossesOptions, type Loss } from '../../features/losses/losses.ts'
import { paths } from '../../lib/paths.ts'
import { oneOf, useUrlState } from '../../lib/url-state.ts'

const kinds = learnedKinds.map((each) => each.kind)

const columns: Column<Loss>[] = [
  {
    id: 'name',
    title: 'Loss',
    by: (loss) => loss.name,
    cell: (loss) => (
      <>
        <TextLink to={paths.loss(loss.name)} className="font-semibold">
          {loss.name}
        </TextLink>
        {loss.description !== '' && <span className="block text-12 text-soft">{loss.description}</span>}
      </>
    ),
  },
  { id: 'kind', title: 'Kind', by: (loss) => loss.kind, cell: (loss) => kindNames[loss.kind] },
  {
    id: 'model',
    title: 'Model',
    by: (loss) => loss.model,
    cell: (loss) => <TextLink to={paths.model(loss.model)}>{loss.model}</TextLink>,
  },
  {
    id: 'newest',
    title: 'Newest version',
    right: true,
    by: (loss) => loss.newest_version,
    cell: (loss) =>
      loss.newest_version === null ? <span className="text-soft">none</span> : <span className="num">{loss.newest_version}</span>,
  },
  {
    id: 'made',
    title: 'Made',
    by: (loss) => loss.created_at,
    cell: (loss) => (
      <>
        {loss.created_by}, <TimeAgo at={loss.created_at} />
      </>
    ),
  },
]

export function Component() {
  const url = useUrlState()
  const losses = useQuery(lossesOptions)
  const kind = oneOf(url.get('kind'), kinds)
  const model = url.get('model')
  const text = url.get('text')
  const all = losses.data?.items ?? []
  const rows = all.filter(
    (loss) =>
      (kind === undefined || loss.kind === kind) &&
      (model === undefined || loss.model === model) &&
      (text === undefined || `${loss.name} ${loss.description}`.toLowerCase().includes(text.toLowerCase())),
  )
  return (
    <Page
      title="Losses"
      facts="What a step is taken against. A learned loss makes a few batches enough; mse is always there and needs no learning."
    >
      {losses.isPending ? (
        <SkeletonRows rows={4} label="Loading losses" />
      ) : !losses.data ? (
        <Failed what="The losses could not be read" error={losses.error} retry={() => void losses.refetch()} />
      ) : all.length === 0 ? (
        <Empty title="No learned loss yet" action={<TextLink to={paths.jobs()}>To the jobs</TextLink>}>
          Meta-train one, with recordings of use meta-train and validate. Until then adaptations take mse.
        </Empty>
      ) : (
        <div>
          <div className="mb-4 flex flex-wrap gap-x-6 gap-y-2">
            <Filter
              label="Kind"
              value={kind}
              onChange={(value) => url.set({ kind: value, page: undefined })}
              options={learnedKinds.map((each) => ({ value: each.kind, label: each.label }))}
            />
            <Filter
              label="Model"
              value={model}
              onChange={(value) => url.set({ model: value, page: undefined })}
              options={[...new Set(all.map((loss) => loss.model))].sort().map((value) => ({ value, label: value }))}
            />
            <Search label="Name" value={text} onChange={(value) => url.set({ text: value, page: undefined })} />
          </div>
          {rows.length === 0 ? (
            <Empty title="No loss fits these filters" action={<TextLink to={paths.losses()}>Show all</TextLink>} />
          ) : (
            <DataTable
              label="Losses"
              columns={columns}
              rows={rows}
              rowKey={(loss) => loss.id}
              sort="name"
              complete={losses.data.complete}
            />
          )}
        </div>
      )}
    </Page>
  )
}

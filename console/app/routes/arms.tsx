import { useQuery } from '@tanstack/react-query'
import { TextLink } from '../../components/button.tsx'
import { DataTable, type Column } from '../../components/data-table.tsx'
import { Search } from '../../components/field.tsx'
import { Page } from '../../components/page.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { armsOptions, fallbackNames, type Arm } from '../../features/arms/arms.ts'
import { paths } from '../../lib/paths.ts'
import { useUrlState } from '../../lib/url-state.ts'

const columns: Column<Arm>[] = [
  {
    id: 'name',
    title: 'Arm',
    by: (arm) => arm.name,
    cell: (arm) => (
      <>
        <TextLink to={paths.arm(arm.name)} className="num font-semibold">
          {arm.name}
        </TextLink>
        {arm.description !== '' && <span className="block text-12 text-soft">{arm.description}</span>}
      </>
    ),
  },
  {
    id: 'joints',
    title: 'Joints',
    right: true,
    by: (arm) => arm.joints.length,
    cell: (arm) => <span className="num">{arm.joints.length}</span>,
  },
  { id: 'fingerprint', title: 'Joints fingerprint', cell: (arm) => <code className="text-12">{arm.joints_fingerprint}</code> },
  { id: 'fallback', title: 'Fallback', by: (arm) => arm.fallback, cell: (arm) => fallbackNames[arm.fallback] },
  {
    id: 'made',
    title: 'Described',
    by: (arm) => arm.created_at,
    cell: (arm) => (
      <>
        {arm.created_by}, <TimeAgo at={arm.created_at} />
      </>
    ),
  },
]

export function Component() {
  const url = useUrlState()
  const arms = useQuery(armsOptions)
  const text = url.get('text')
  const all = arms.data?.items ?? []
  const rows = all.filter(
    (arm) => text === undefined || `${arm.name} ${arm.description}`.toLowerCase().includes(text.toLowerCase()),
  )
  return (
    <Page title="Arms" facts="One kind of manipulator each: its joints in order, their limits, and what its torque means.">
      {arms.isPending ? (
        <SkeletonRows rows={3} label="Loading arms" />
      ) : !arms.data ? (
        <Failed what="The arms could not be read" error={arms.error} retry={() => void arms.refetch()} />
      ) : all.length === 0 ? (
        <Empty
          title="No arm yet"
          action={
            <a className="underline underline-offset-3" href={paths.docs()}>
              How to describe one
            </a>
          }
        >
          Describe one through the API: joints with their limits, gravity, and what its torque means. Everything else is built on
          it.
        </Empty>
      ) : (
        <div>
          <div className="mb-4">
            <Search label="Name" value={text} onChange={(value) => url.set({ text: value, page: undefined })} />
          </div>
          {rows.length === 0 ? (
            <Empty title="No arm fits this" action={<TextLink to={paths.arms()}>Show all</TextLink>} />
          ) : (
            <DataTable
              label="Arms"
              columns={columns}
              rows={rows}
              rowKey={(arm) => arm.id}
              sort="name"
              complete={arms.data.complete}
            />
          )}
        </div>
      )}
    </Page>
  )
}

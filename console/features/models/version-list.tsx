import { Button, TextLink } from '../../components/button.tsx'
import { DataTable, type Column } from '../../components/data-table.tsx'
import { Quantity } from '../../components/quantity.tsx'
import { Stamp } from '../../components/stamp.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { paths } from '../../lib/paths.ts'
import type { Model, Version } from './models.ts'

export function VersionStamp({ model, version }: { model: Model; version: Version }) {
  if (model.live_version === version.version)
    return (
      <Stamp tone="live" mark="dot">
        live
      </Stamp>
    )
  return version.first_released_at === null ? (
    <Stamp tone="soft" mark="ring">
      not released
    </Stamp>
  ) : (
    <Stamp tone="soft" mark="bar">
      was live
    </Stamp>
  )
}

export function Origin({ version }: { version: Version }) {
  const { origin } = version
  switch (origin.kind) {
    case 'fitted':
      return origin.job === undefined ? (
        <>fitted</>
      ) : (
        <>
          fitted by <TextLink to={paths.job(origin.job)}>a job</TextLink>
        </>
      )
    case 'promoted':
      return origin.adaptation === undefined ? (
        <>promoted</>
      ) : (
        <>
          promoted from <TextLink to={paths.adaptation(origin.adaptation)}>an adaptation</TextLink>
          {origin.revision !== undefined && `, revision ${origin.revision}`}
          {origin.parent_version !== undefined && ` of version ${origin.parent_version}`}
        </>
      )
    case 'imported':
      return <>imported</>
  }
}

interface VersionListProps {
  model: Model
  versions: Version[]
  complete: boolean
  onRelease: (version: number) => void
  releaseBlocked: string | undefined
}

export function VersionList({ model, versions, complete, onRelease, releaseBlocked }: VersionListProps) {
  const columns: Column<Version>[] = [
    {
      id: 'version',
      title: 'Version',
      by: (version) => version.version,
      cell: (version) => (
        <span className="inline-flex items-baseline gap-3">
          <TextLink to={paths.model(model.name, { version: version.version })} className="num font-semibold">
            {version.version}
          </TextLink>
          <VersionStamp model={model} version={version} />
        </span>
      ),
    },
    {
      id: 'error',
      title: 'Error, unseen data',
      right: true,
      by: (version) => version.metrics?.error ?? null,
      cell: (version) => <Quantity value={version.metrics?.error} missing="not measured" />,
    },
    { id: 'origin', title: 'Origin', by: (version) => version.origin.kind, cell: (version) => <Origin version={version} /> },
    {
      id: 'network',
      title: 'Network',
      minor: true,
      cell: (version) => (
        <span className="num text-12">
          {version.network.sizes.join('–')} {version.network.activation}
        </span>
      ),
    },
    { id: 'by', title: 'By', minor: true, by: (version) => version.created_by, cell: (version) => version.created_by },
    { id: 'at', title: 'Made', by: (version) => version.created_at, cell: (version) => <TimeAgo at={version.created_at} /> },
    {
      id: 'acts',
      title: '',
      right: true,
      cell: (version) =>
        model.live_version === version.version || model.archived_at !== null ? null : (
          <Button
            blocked={releaseBlocked}
            onClick={() => onRelease(version.version)}
            aria-label={`Release version ${version.version}`}
          >
            Release…
          </Button>
        ),
    },
  ]
  return (
    <DataTable
      label="Versions"
      columns={columns}
      rows={versions}
      rowKey={(version) => String(version.version)}
      sort="-version"
      complete={complete}
    />
  )
}

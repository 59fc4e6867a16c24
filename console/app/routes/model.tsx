import { useQuery } from '@tanstack/react-query'
import { useState } from 'react'
import { useParams } from 'react-router-dom'
import { Button, TextLink } from '../../components/button.tsx'
import { Page, Section } from '../../components/page.tsx'
import { Stamp } from '../../components/stamp.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { Tabs } from '../../components/tabs.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import {
  formerVersions,
  modelOptions,
  releasesOptions,
  versionsOptions,
  type ModelWithEtag,
} from '../../features/models/models.ts'
import { ReleaseDialog, RollBackDialog } from '../../features/models/release-dialog.tsx'
import { ReleaseHistory } from '../../features/models/release-history.tsx'
import { VersionDetails } from '../../features/models/version-details.tsx'
import { VersionList, VersionStamp } from '../../features/models/version-list.tsx'
import { useBlocked } from '../../features/session/session.ts'
import { paths } from '../../lib/paths.ts'
import { useUrlState } from '../../lib/url-state.ts'

type Act = { kind: 'release'; version: number } | { kind: 'rollback' }

export function Component() {
  const { model: name } = useParams()
  const model = useQuery(modelOptions(name!))
  const releases = useQuery(releasesOptions(name!))
  const [act, setAct] = useState<Act>()
  const releaseBlocked = useBlocked('release', 'release versions')
  const rollBackBlocked = useBlocked('roll_back', 'roll back')
  if (!model.data) {
    return (
      <Page title={name!} above={{ to: paths.models(), label: 'Models' }}>
        {model.isError ? (
          <Failed what={`Model ${name} could not be read`} error={model.error} retry={() => void model.refetch()} />
        ) : (
          <SkeletonRows rows={6} label="Loading the model" />
        )}
      </Page>
    )
  }
  const { data } = model
  const former = releases.data ? formerVersions(releases.data.items, data.live_version) : []
  return (
    <Page
      title={data.name}
      above={{ to: paths.models(), label: 'Models' }}
      state={<ModelStamp model={data} />}
      facts={
        <>
          Torque of arm{' '}
          <TextLink to={paths.arm(data.arm)} className="num text-ink">
            {data.arm}
          </TextLink>
          . {data.description}
        </>
      }
      actions={
        data.live_version === null ? null : (
          <Button
            look="stop"
            blocked={rollBackBlocked ?? (former.length === 0 ? 'No other version has been live before.' : undefined)}
            onClick={() => setAct({ kind: 'rollback' })}
          >
            Roll back…
          </Button>
        )
      }
    >
      <Versions model={data} releaseBlocked={releaseBlocked} onRelease={(version) => setAct({ kind: 'release', version })} />
      {act?.kind === 'release' && <ReleaseDialog model={data} version={act.version} onClose={() => setAct(undefined)} />}
      {act?.kind === 'rollback' && releases.data && (
        <RollBackDialog model={data} releases={releases.data.items} onClose={() => setAct(undefined)} />
      )}
    </Page>
  )
}

function ModelStamp({ model }: { model: ModelWithEtag }) {
  if (model.archived_at !== null)
    return (
      <Stamp tone="soft" mark="bar">
        archived
      </Stamp>
    )
  if (model.live_version === null)
    return (
      <Stamp tone="soft" mark="ring">
        nothing live
      </Stamp>
    )
  return (
    <span className="inline-flex items-baseline gap-3">
      <Stamp tone="live" mark="dot">
        version {model.live_version} live
      </Stamp>
      {model.live_since !== null && (
        <span className="text-12 text-soft">
          since <TimeAgo at={model.live_since} />
        </span>
      )}
    </span>
  )
}

function Versions({
  model,
  releaseBlocked,
  onRelease,
}: {
  model: ModelWithEtag
  releaseBlocked: string | undefined
  onRelease: (version: number) => void
}) {
  const url = useUrlState()
  const versions = useQuery(versionsOptions(model.name))
  const releases = useQuery(releasesOptions(model.name))
  const all = versions.data?.items ?? []
  const live = all.find((version) => version.version === model.live_version)
  const shown = all.find((version) => version.version === Number(url.get('version'))) ?? live ?? all[0]
  return (
    <>
      {shown && (
        <Section title={`Version ${shown.version}`} note={<VersionStamp model={model} version={shown} />}>
          <VersionDetails version={shown} live={live} />
        </Section>
      )}
      <Tabs
        label="Versions and releases"
        value={url.get('view') === 'releases' ? 'releases' : 'versions'}
        onChange={(value) => url.set({ view: value === 'versions' ? undefined : value })}
        tabs={[
          {
            value: 'versions',
            label: 'Versions',
            content: versions.isPending ? (
              <SkeletonRows label="Loading versions" />
            ) : !versions.data ? (
              <Failed what="The versions could not be read" error={versions.error} retry={() => void versions.refetch()} />
            ) : all.length === 0 ? (
              <Empty title="No version yet">
                Fit one on recordings of the arm (a job), import one, or promote an adapted state. A version can be released once
                it is there.
              </Empty>
            ) : (
              <VersionList
                model={model}
                versions={all}
                complete={versions.data.complete}
                releaseBlocked={releaseBlocked}
                onRelease={onRelease}
              />
            ),
          },
          {
            value: 'releases',
            label: 'Releases',
            content: releases.isPending ? (
              <SkeletonRows label="Loading releases" />
            ) : !releases.data ? (
              <Failed what="The releases could not be read" error={releases.error} retry={() => void releases.refetch()} />
            ) : (
              <ReleaseHistory model={model.name} releases={releases.data.items} />
            ),
          },
        ]}
      />
    </>
  )
}

import { useMutation, useQuery, useQueryClient } from '@tanstack/react-query'
import { useState } from 'react'
import { isProblem } from '../../../sdk/index.ts'
import { ActDialog } from '../../components/act-dialog.tsx'
import { Button } from '../../components/button.tsx'
import { SelectField } from '../../components/field.tsx'
import { useNotice } from '../../components/notices.tsx'
import { Caution, Skeleton } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { formerVersions, releaseOptions, releasesOptions, rollBackOptions, type ModelWithEtag, type Release } from './models.ts'

const caution =
  'Predicted torques change at once on every controller that names no version. Commission at reduced speed with nobody in reach; the controller’s own limits stay in charge.'

function before(model: ModelWithEtag): string {
  return model.live_version === null ? 'nothing is live yet' : `version ${model.live_version}`
}

function consequence(model: ModelWithEtag, version: number): string {
  return `From the next request on, predictions of ${model.name} that name no version come from version ${version}; until now: ${before(model)}. Adaptations go on with the version they started from.`
}

/** The decision is made on the model as it was when the dialog opened; what has changed since is shown before it can be made again. */
export function ReleaseDialog({
  model: current,
  version,
  onClose,
}: {
  model: ModelWithEtag
  version: number
  onClose: () => void
}) {
  const client = useQueryClient()
  const say = useNotice()
  const [decidedOn, setDecidedOn] = useState(current)
  const release = useMutation(releaseOptions(client, current.name))
  const outdated = isProblem(release.error, 'precondition-failed')
  return (
    <ActDialog
      title={`Release version ${version} of ${current.name}`}
      act={`Make version ${version} live`}
      consequence={consequence(decidedOn, version)}
      reasonHint="Kept in the release history for ever, with your name."
      onClose={onClose}
      pending={release.isPending}
      error={outdated ? null : release.error}
      blocked={outdated ? 'Look at what has changed first.' : undefined}
      onAct={(reason) =>
        release.mutate(
          { version, reason, etag: decidedOn.etag },
          {
            onSuccess: () => {
              say(`Version ${version} of ${current.name} is live.`)
              onClose()
            },
          },
        )
      }
    >
      <Caution>{caution}</Caution>
      {outdated && (
        <Changed
          model={current}
          onLookedAt={() => {
            setDecidedOn(current)
            release.reset()
          }}
        />
      )}
    </ActDialog>
  )
}

export function RollBackDialog({
  model: current,
  releases,
  onClose,
}: {
  model: ModelWithEtag
  releases: Release[]
  onClose: () => void
}) {
  const client = useQueryClient()
  const say = useNotice()
  const [decidedOn, setDecidedOn] = useState(current)
  const [chosen, setChosen] = useState<number>()
  const rollBack = useMutation(rollBackOptions(client, current.name))
  const outdated = isProblem(rollBack.error, 'precondition-failed')
  const former = formerVersions(releases, decidedOn.live_version)
  const to = chosen !== undefined && former.includes(chosen) ? chosen : former[0]!
  return (
    <ActDialog
      title={`Roll ${current.name} back`}
      act={`Roll back to version ${to}`}
      destructive
      consequence={consequence(decidedOn, to)}
      reasonHint="Kept in the release history for ever, with your name."
      onClose={onClose}
      pending={rollBack.isPending}
      error={outdated ? null : rollBack.error}
      blocked={outdated ? 'Look at what has changed first.' : undefined}
      onAct={(reason) =>
        rollBack.mutate(
          { to, reason, etag: decidedOn.etag },
          {
            onSuccess: () => {
              say(`Version ${to} of ${current.name} is live again.`)
              onClose()
            },
          },
        )
      }
    >
      <SelectField
        label="Back to"
        value={to}
        onChange={(event) => setChosen(Number(event.target.value))}
        hint="Only versions that have been live; the one before stands first."
      >
        {former.map((version) => (
          <option key={version} value={version}>
            version {version}
          </option>
        ))}
      </SelectField>
      <Caution>{caution}</Caution>
      {outdated && (
        <Changed
          model={current}
          onLookedAt={() => {
            setDecidedOn(current)
            rollBack.reset()
          }}
        />
      )}
    </ActDialog>
  )
}

/** Somebody else was faster: who, what, why. */
function Changed({ model, onLookedAt }: { model: ModelWithEtag; onLookedAt: () => void }) {
  const releases = useQuery(releasesOptions(model.name))
  const latest = releases.data?.items[0]
  return (
    <div role="alert" className="border-l-4 border-load py-1 pl-3">
      <p className="font-semibold text-load">It has changed while you were deciding</p>
      {releases.isFetching || !latest ? (
        <Skeleton className="mt-2 h-5 w-64" />
      ) : (
        <p>
          {latest.by} {latest.kind === 'release' ? 'released' : 'rolled back to'} version {latest.version}{' '}
          <TimeAgo at={latest.at} />: “{latest.reason}” Live now: {before(model)}.
        </p>
      )}
      <Button className="mt-2" onClick={onLookedAt} blocked={releases.isFetching ? 'Reading what has changed.' : undefined}>
        Decide on that
      </Button>
    </div>
  )
}

import { useMutation, useQuery, useQueryClient } from '@tanstack/react-query'
import { useState } from 'react'
import { ActDialog } from '../../components/act-dialog.tsx'
import { Button, TextLink } from '../../components/button.tsx'
import { DataTable, type Column } from '../../components/data-table.tsx'
import { Filter, Search } from '../../components/field.tsx'
import { useNotice } from '../../components/notices.tsx'
import { Page } from '../../components/page.tsx'
import { Quantity } from '../../components/quantity.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { armsOptions } from '../../features/arms/arms.ts'
import { deleteRecordingOptions, recordingsOptions, uses, type Recording } from '../../features/recordings/recordings.ts'
import { UploadDialog } from '../../features/recordings/upload-dialog.tsx'
import { useBlocked, useMay } from '../../features/session/session.ts'
import { bytes, grouped } from '../../lib/numbers.ts'
import { paths } from '../../lib/paths.ts'
import { oneOf, useUrlState } from '../../lib/url-state.ts'

export function Component() {
  const url = useUrlState()
  const recordings = useQuery(recordingsOptions)
  const arms = useQuery(armsOptions)
  const mayBuild = useMay('build')
  const blocked = useBlocked('build', 'upload recordings')
  const [uploading, setUploading] = useState(false)
  const [deleting, setDeleting] = useState<Recording>()
  const use = oneOf(
    url.get('use'),
    uses.map((each) => each.use),
  )
  const arm = url.get('arm')
  const text = url.get('text')
  const all = recordings.data?.items ?? []
  const rows = all.filter(
    (recording) =>
      (use === undefined || recording.use === use) &&
      (arm === undefined || recording.arm === arm) &&
      (text === undefined ||
        [recording.name, recording.context.motion, recording.context.tool, recording.context.robot]
          .join(' ')
          .toLowerCase()
          .includes(text.toLowerCase())),
  )
  const known = (arms.data?.items ?? []).filter((each) => each.archived_at === null).map((each) => each.name)
  const columns: Column<Recording>[] = [
    {
      id: 'name',
      title: 'Recording',
      by: (recording) => recording.name,
      cell: (recording) => (
        <>
          <span className="font-semibold break-all">{recording.name}</span>
          <span className="block text-12 text-soft">
            {[
              recording.context.robot,
              recording.context.motion,
              recording.context.tool,
              recording.context.payload && `${recording.context.payload.mass} kg`,
            ]
              .filter(Boolean)
              .join(', ')}
          </span>
        </>
      ),
    },
    {
      id: 'arm',
      title: 'Arm',
      by: (recording) => recording.arm,
      cell: (recording) => <span className="num">{recording.arm}</span>,
    },
    {
      id: 'use',
      title: 'Use',
      by: (recording) => recording.use,
      cell: (recording) => uses.find((each) => each.use === recording.use)!.label,
    },
    {
      id: 'rows',
      title: 'Rows',
      right: true,
      by: (recording) => recording.rows,
      cell: (recording) => <span className="num">{grouped(recording.rows)}</span>,
    },
    {
      id: 'duration',
      title: 'Duration',
      right: true,
      by: (recording) => recording.duration,
      cell: (recording) => <Quantity value={recording.duration} unit="s" />,
    },
    {
      id: 'rate',
      title: 'Rate',
      right: true,
      minor: true,
      by: (recording) => recording.rate,
      cell: (recording) => <Quantity value={recording.rate} unit="Hz" />,
    },
    {
      id: 'size',
      title: 'Size',
      right: true,
      minor: true,
      by: (recording) => recording.bytes,
      cell: (recording) => (
        <span className="num" title={`${recording.bytes} B`}>
          {bytes(recording.bytes).value} <span className="text-12 text-soft">{bytes(recording.bytes).unit}</span>
        </span>
      ),
    },
    {
      id: 'at',
      title: 'Uploaded',
      by: (recording) => recording.created_at,
      cell: (recording) => (
        <>
          <TimeAgo at={recording.created_at} />
          <span className="block text-12 text-soft">{recording.created_by}</span>
        </>
      ),
    },
    ...(mayBuild
      ? [
          {
            id: 'acts',
            title: '',
            right: true,
            cell: (recording: Recording) => (
              <Button look="quiet" aria-label={`Delete ${recording.name}`} onClick={() => setDeleting(recording)}>
                Delete…
              </Button>
            ),
          },
        ]
      : []),
  ]
  return (
    <Page
      title="Recordings"
      facts="Logged motions, and what each is for. Rates are chosen on validate, figures reported on evaluate; no training takes either."
      actions={
        <Button
          look="primary"
          icon="upload"
          blocked={blocked ?? (arms.data && known.length === 0 ? 'Describe the arm through the API first.' : undefined)}
          onClick={() => setUploading(true)}
        >
          Upload…
        </Button>
      }
    >
      {recordings.isPending ? (
        <SkeletonRows rows={8} label="Loading recordings" />
      ) : !recordings.data ? (
        <Failed what="The recordings could not be read" error={recordings.error} retry={() => void recordings.refetch()} />
      ) : all.length === 0 ? (
        <Empty title="No recording yet">
          Log a motion that reaches what the arm will do, as CSV with time, position, velocity, acceleration and torque of every
          joint, and upload it.
        </Empty>
      ) : (
        <div>
          <div className="mb-4 flex flex-wrap gap-x-6 gap-y-2">
            <Filter
              label="Use"
              value={use}
              onChange={(value) => url.set({ use: value, page: undefined })}
              options={uses.map((each) => ({ value: each.use, label: each.label }))}
            />
            <Filter
              label="Arm"
              value={arm}
              onChange={(value) => url.set({ arm: value, page: undefined })}
              options={[...new Set(all.map((recording) => recording.arm))].sort().map((value) => ({ value, label: value }))}
            />
            <Search label="Name, motion, tool" value={text} onChange={(value) => url.set({ text: value, page: undefined })} />
          </div>
          {rows.length === 0 ? (
            <Empty title="No recording fits these filters" action={<TextLink to={paths.recordings()}>Show all</TextLink>} />
          ) : (
            <DataTable
              label="Recordings"
              columns={columns}
              rows={rows}
              rowKey={(recording) => recording.id}
              sort="-at"
              complete={recordings.data.complete}
            />
          )}
        </div>
      )}
      {uploading && <UploadDialog arms={known} onClose={() => setUploading(false)} />}
      {deleting && <DeleteDialog recording={deleting} onClose={() => setDeleting(undefined)} />}
    </Page>
  )
}

function DeleteDialog({ recording, onClose }: { recording: Recording; onClose: () => void }) {
  const remove = useMutation(deleteRecordingOptions(useQueryClient(), recording.id))
  const say = useNotice()
  return (
    <ActDialog
      title={`Delete ${recording.name}`}
      act="Delete its rows"
      destructive
      consequence={`Its ${grouped(recording.rows)} rows are deleted and can’t be had back from here. Versions fitted on it keep its name and checksum.`}
      onClose={onClose}
      pending={remove.isPending}
      error={remove.error}
      onAct={(reason) =>
        remove.mutate(reason, {
          onSuccess: () => {
            say(`${recording.name} is deleted.`)
            onClose()
          },
        })
      }
    />
  )
}

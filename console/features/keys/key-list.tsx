import { useState } from 'react'
import { Button } from '../../components/button.tsx'
import { DataTable, type Column } from '../../components/data-table.tsx'
import { Stamp } from '../../components/stamp.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { useNow } from '../../lib/times.ts'
import { RevokeKeyDialog, RotateKeyDialog } from './key-dialogs.tsx'
import { type Key } from './keys.ts'

const soonMs = 14 * 86_400_000

export function KeyStamp({ of }: { of: Key }) {
  const now = useNow()
  if (of.state === 'revoked')
    return (
      <Stamp tone="soft" mark="cross">
        revoked
      </Stamp>
    )
  if (of.state === 'expired')
    return (
      <Stamp tone="soft" mark="bar">
        expired
      </Stamp>
    )
  if (Date.parse(of.expires_at) - now < soonMs)
    return (
      <Stamp tone="load" mark="diamond">
        expires soon
      </Stamp>
    )
  return (
    <Stamp tone="live" mark="dot">
      active
    </Stamp>
  )
}

export function KeyList({ keys, complete }: { keys: Key[]; complete: boolean }) {
  const now = useNow()
  const [act, setAct] = useState<{ kind: 'rotate' | 'revoke'; key: Key }>()
  const columns: Column<Key>[] = [
    {
      id: 'name',
      title: 'Name',
      by: (key) => key.name,
      cell: (key) => (
        <>
          <span className="font-semibold break-words">{key.name}</span>{' '}
          <span className="num text-12 text-soft" title="Last four characters of its secret">
            …{key.hint}
          </span>
        </>
      ),
    },
    {
      id: 'state',
      title: 'State',
      by: (key) => key.state,
      cell: (key) => (
        <>
          <KeyStamp of={key} />
          {key.overlap_until !== null && Date.parse(key.overlap_until) > now && (
            <span className="block text-12 text-soft">
              old secret ends <TimeAgo at={key.overlap_until} />
            </span>
          )}
        </>
      ),
    },
    { id: 'scopes', title: 'Scopes', cell: (key) => <span className="num text-12">{key.scopes.join(', ')}</span> },
    {
      id: 'used',
      title: 'Last used',
      by: (key) => key.last_used_at,
      cell: (key) => (key.last_used_at === null ? <span className="text-soft">never</span> : <TimeAgo at={key.last_used_at} />),
    },
    { id: 'expires', title: 'Expires', by: (key) => key.expires_at, cell: (key) => <TimeAgo at={key.expires_at} /> },
    {
      id: 'made',
      title: 'Made',
      minor: true,
      by: (key) => key.created_at,
      cell: (key) => (
        <>
          {key.created_by}, <TimeAgo at={key.created_at} />
        </>
      ),
    },
    {
      id: 'acts',
      title: '',
      right: true,
      cell: (key) =>
        key.state === 'active' ? (
          <span className="inline-flex gap-2">
            <Button onClick={() => setAct({ kind: 'rotate', key })} aria-label={`Rotate key ${key.name}`}>
              Rotate…
            </Button>
            <Button look="stop" onClick={() => setAct({ kind: 'revoke', key })} aria-label={`Revoke key ${key.name}`}>
              Revoke…
            </Button>
          </span>
        ) : null,
    },
  ]
  return (
    <>
      <DataTable label="API keys" columns={columns} rows={keys} rowKey={(key) => key.id} sort="-made" complete={complete} />
      {act?.kind === 'rotate' && <RotateKeyDialog of={act.key} onClose={() => setAct(undefined)} />}
      {act?.kind === 'revoke' && <RevokeKeyDialog of={act.key} onClose={() => setAct(undefined)} />}
    </>
  )
}

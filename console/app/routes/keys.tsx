import { useQuery } from '@tanstack/react-query'
import { useState } from 'react'
import { Button, TextLink } from '../../components/button.tsx'
import { Filter, Search } from '../../components/field.tsx'
import { Page } from '../../components/page.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { CreateKeyDialog } from '../../features/keys/key-dialogs.tsx'
import { KeyList } from '../../features/keys/key-list.tsx'
import { keysOptions } from '../../features/keys/keys.ts'
import { useMay } from '../../features/session/session.ts'
import { paths } from '../../lib/paths.ts'
import { oneOf, useUrlState } from '../../lib/url-state.ts'

const states = ['active', 'expired', 'revoked'] as const

export function Component() {
  const may = useMay('manage_keys')
  return may ? (
    <Keys />
  ) : (
    <Page title="Keys">
      <Empty title="Keys are the administrator’s">
        Your role doesn’t make or see keys. Ask an administrator of the team for one.
      </Empty>
    </Page>
  )
}

function Keys() {
  const url = useUrlState()
  const keys = useQuery(keysOptions)
  const [creating, setCreating] = useState(false)
  const state = oneOf(url.get('state'), states)
  const text = url.get('text')
  const rows = (keys.data?.items ?? []).filter(
    (key) =>
      (state === undefined || key.state === state) &&
      (text === undefined || `${key.name} ${key.created_by}`.toLowerCase().includes(text.toLowerCase())),
  )
  const create = (
    <Button look="primary" icon="plus" onClick={() => setCreating(true)}>
      Create key…
    </Button>
  )
  return (
    <Page
      title="Keys"
      actions={create}
      facts="With a key a controller or a script acts for the team. Its secret is shown once, when it is made or rotated."
    >
      {keys.isPending ? (
        <SkeletonRows rows={6} label="Loading keys" />
      ) : !keys.data ? (
        <Failed what="The keys could not be read" error={keys.error} retry={() => void keys.refetch()} />
      ) : keys.data.items.length === 0 ? (
        <Empty title="No key yet">
          Make one per program, with the scopes it needs and no more: a controller needs predict and adapt.
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
            <Search label="Name, maker" value={text} onChange={(value) => url.set({ text: value, page: undefined })} />
          </div>
          {rows.length === 0 ? (
            <Empty title="No key fits these filters" action={<TextLink to={paths.keys()}>Show all</TextLink>} />
          ) : (
            <KeyList keys={rows} complete={keys.data.complete} />
          )}
        </div>
      )}
      {creating && <CreateKeyDialog onClose={() => setCreating(false)} />}
    </Page>
  )
}

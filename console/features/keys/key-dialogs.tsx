import { useMutation, useQueryClient } from '@tanstack/react-query'
import { useId, useState } from 'react'
import { ActDialog } from '../../components/act-dialog.tsx'
import { Button } from '../../components/button.tsx'
import { CopyButton } from '../../components/copy-button.tsx'
import { Dialog, DialogActions } from '../../components/dialog.tsx'
import { SelectField, TextField } from '../../components/field.tsx'
import { useNotice } from '../../components/notices.tsx'
import { InlineFailure } from '../../components/states.tsx'
import { faultAt } from '../../lib/failures.ts'
import { exact } from '../../lib/times.ts'
import { createKeyOptions, revokeKeyOptions, rotateKeyOptions, scopes, type Key, type KeyWithSecret, type Scope } from './keys.ts'

const days = [30, 90, 180, 365, 730]

export function CreateKeyDialog({ onClose }: { onClose: () => void }) {
  const client = useQueryClient()
  const create = useMutation(createKeyOptions(client))
  const [name, setName] = useState('')
  const [chosen, setChosen] = useState<Scope[]>(['predict'])
  const [lasts, setLasts] = useState(365)
  const [tried, setTried] = useState(false)
  const group = useId()
  if (create.data) return <SecretDialog made={create.data} title={`Key “${create.data.key.name}” is made`} onClose={onClose} />
  const nameMissing = name.trim() === '' ? 'Name it after the program or cell that will use it.' : undefined
  const scopesMissing = chosen.length === 0
  return (
    <Dialog
      open
      onClose={onClose}
      title="Create an API key"
      description="A key lets a program act for the team, within its scopes, until it expires or is revoked."
    >
      <form
        className="flex flex-col gap-4"
        onSubmit={(event) => {
          event.preventDefault()
          setTried(true)
          if (nameMissing || scopesMissing || create.isPending) return
          // A minute less than asked for, so that two years by this browser's clock are not more than two years by the server's.
          create.mutate({
            name: name.trim(),
            scopes: chosen,
            expires_at: new Date(Date.now() + lasts * 86_400_000 - 60_000).toISOString(),
          })
        }}
      >
        <TextField
          label="Name"
          value={name}
          maxLength={120}
          autoFocus
          onChange={(event) => setName(event.target.value)}
          error={faultAt(create.error, '/name') ?? (tried ? nameMissing : undefined)}
        />
        <fieldset aria-describedby={tried && scopesMissing ? `${group}-error` : undefined}>
          <legend className="mb-1 font-semibold">Scopes</legend>
          <div className="flex flex-col">
            {scopes.map(({ scope, allows }) => (
              <label key={scope} className="flex min-h-9 items-start gap-3 border-t border-line py-1.5 first:border-t-0">
                <input
                  type="checkbox"
                  className="mt-0.5 size-4"
                  checked={chosen.includes(scope)}
                  onChange={(event) =>
                    setChosen(event.target.checked ? [...chosen, scope] : chosen.filter((each) => each !== scope))
                  }
                />
                <span className="grid grow grid-cols-[5rem_1fr] gap-2">
                  <span className="num font-semibold">{scope}</span>
                  <span className="text-soft">{allows}</span>
                </span>
              </label>
            ))}
          </div>
          {tried && scopesMissing && (
            <p id={`${group}-error`} role="alert" className="text-12 font-semibold text-stop">
              Choose at least one scope.
            </p>
          )}
          <p className="mt-1 text-12 text-soft">No key resumes a frozen adaptation, sees people, or makes keys.</p>
        </fieldset>
        <SelectField
          label="Expires after"
          value={lasts}
          onChange={(event) => setLasts(Number(event.target.value))}
          hint="Rotate it before that; the program goes on with the new secret."
          error={faultAt(create.error, '/expires_at')}
        >
          {days.map((count) => (
            <option key={count} value={count}>
              {count % 365 === 0 ? (count === 365 ? '1 year' : `${count / 365} years`) : `${count} days`}
            </option>
          ))}
        </SelectField>
        {create.error && <InlineFailure error={create.error} />}
        <DialogActions>
          <Button onClick={onClose}>Not now</Button>
          <Button type="submit" look="primary" pending={create.isPending}>
            Create key
          </Button>
        </DialogActions>
      </form>
    </Dialog>
  )
}

/** The secret, once. The dialog stays until its reader says that it is stored. */
function SecretDialog({ made, title, onClose }: { made: KeyWithSecret; title: string; onClose: () => void }) {
  const [stored, setStored] = useState(false)
  return (
    <Dialog
      open
      held
      onClose={onClose}
      title={title}
      description="This is the only time the secret is shown. The service keeps a checksum of it, not the secret."
    >
      <div className="flex flex-col gap-2">
        <code
          className="block border border-edge bg-sunken p-3 break-all select-all"
          data-testid="secret"
          tabIndex={0}
          aria-label="Secret"
        >
          {made.secret}
        </code>
        <div>
          <CopyButton text={made.secret} label="Copy secret" />
        </div>
      </div>
      {made.key.overlap_until && <p>The former secret goes on working until {exact(made.key.overlap_until)}.</p>}
      <label className="flex min-h-9 items-center gap-3">
        <input type="checkbox" className="size-4" checked={stored} onChange={(event) => setStored(event.target.checked)} />I have
        stored it where the program finds it
      </label>
      <DialogActions>
        <Button
          look="primary"
          onClick={onClose}
          blocked={stored ? undefined : 'Store the secret first; it can’t be shown again.'}
        >
          Done
        </Button>
      </DialogActions>
    </Dialog>
  )
}

const overlaps: [seconds: number, label: string][] = [
  [0, 'none: the old secret stops at once'],
  [3_600, '1 hour'],
  [86_400, '1 day'],
  [604_800, '7 days'],
  [2_592_000, '30 days'],
]

export function RotateKeyDialog({ of, onClose }: { of: Key; onClose: () => void }) {
  const client = useQueryClient()
  const rotate = useMutation(rotateKeyOptions(client, of.id))
  const [overlap, setOverlap] = useState(86_400)
  if (rotate.data) return <SecretDialog made={rotate.data} title={`Key “${of.name}” has a new secret`} onClose={onClose} />
  return (
    <Dialog
      open
      onClose={onClose}
      title={`Rotate key “${of.name}”`}
      description="It gets a new secret now, shown once. Scopes and expiry stay. During the overlap both secrets work, so that programs can be moved over without a pause."
    >
      <form
        className="flex flex-col gap-4"
        onSubmit={(event) => {
          event.preventDefault()
          if (!rotate.isPending) rotate.mutate(overlap)
        }}
      >
        <SelectField label="Overlap" value={overlap} onChange={(event) => setOverlap(Number(event.target.value))}>
          {overlaps.map(([seconds, label]) => (
            <option key={seconds} value={seconds}>
              {label}
            </option>
          ))}
        </SelectField>
        {rotate.error && <InlineFailure error={rotate.error} />}
        <DialogActions>
          <Button onClick={onClose}>Leave as it is</Button>
          <Button type="submit" look="primary" pending={rotate.isPending}>
            Rotate
          </Button>
        </DialogActions>
      </form>
    </Dialog>
  )
}

export function RevokeKeyDialog({ of, onClose }: { of: Key; onClose: () => void }) {
  const client = useQueryClient()
  const say = useNotice()
  const revoke = useMutation(revokeKeyOptions(client, of.id))
  return (
    <ActDialog
      title={`Revoke key “${of.name}”`}
      act="Revoke"
      destructive
      consequence="Every program that uses it is refused from now on, with the old secret too if it is being rotated. Controllers fall back to what their arm declares. This can’t be undone."
      onClose={onClose}
      pending={revoke.isPending}
      error={revoke.error}
      onAct={(reason) =>
        revoke.mutate(reason, {
          onSuccess: () => {
            say(`Key “${of.name}” is revoked.`)
            onClose()
          },
        })
      }
    />
  )
}

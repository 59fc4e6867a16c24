import { useMutation, useQueryClient } from '@tanstack/react-query'
import { useState } from 'react'
import { isProblem } from '../../../sdk/index.ts'
import { Button } from '../../components/button.tsx'
import { Dialog, DialogActions } from '../../components/dialog.tsx'
import { TextField } from '../../components/field.tsx'
import { useNotice } from '../../components/notices.tsx'
import { InlineFailure } from '../../components/states.tsx'
import { changePasswordOptions } from './session.ts'

const shortest = 15

export function PasswordDialog({ email, onClose }: { email: string; onClose: () => void }) {
  const change = useMutation(changePasswordOptions(useQueryClient()))
  const say = useNotice()
  const [current, setCurrent] = useState('')
  const [next, setNext] = useState('')
  const [tried, setTried] = useState(false)
  const short = [...next].length < shortest ? `At least ${shortest} characters; a few unrelated words do well.` : undefined
  const unsuitable = isProblem(change.error, 'password-unsuitable') ? change.error.problem?.detail : undefined
  return (
    <Dialog open onClose={onClose} title="Change your password" description="Your other sessions end; this one goes on.">
      <form
        className="flex flex-col gap-4"
        onSubmit={(event) => {
          event.preventDefault()
          setTried(true)
          if (current === '' || short || change.isPending) return
          change.mutate(
            { current, new: next },
            {
              onSuccess: () => {
                say('Your password is changed.')
                onClose()
              },
            },
          )
        }}
      >
        <input type="text" name="username" autoComplete="username" value={email} readOnly hidden />
        <TextField
          label="Password now"
          type="password"
          autoComplete="current-password"
          autoFocus
          value={current}
          onChange={(event) => setCurrent(event.target.value)}
          error={tried && current === '' ? 'It is needed to be sure that it is you.' : undefined}
        />
        <TextField
          label="New password"
          type="password"
          autoComplete="new-password"
          value={next}
          onChange={(event) => setNext(event.target.value)}
          hint={`${shortest} characters or more, of any kind. Common ones are refused.`}
          error={unsuitable ?? (tried ? short : undefined)}
        />
        {change.error && !unsuitable && <InlineFailure error={change.error} />}
        <DialogActions>
          <Button onClick={onClose}>Leave as it is</Button>
          <Button type="submit" look="primary" pending={change.isPending}>
            Change password
          </Button>
        </DialogActions>
      </form>
    </Dialog>
  )
}

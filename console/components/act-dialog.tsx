import { useState, type ReactNode } from 'react'
import { Button } from './button.tsx'
import { Dialog, DialogActions } from './dialog.tsx'
import { TextArea } from './field.tsx'
import { InlineFailure } from './states.tsx'

interface ActDialogProps {
  onClose: () => void
  /** The act and its target: "Freeze kiln-cart-loader-1". */
  title: string
  /** What will happen, in plain words. */
  consequence: ReactNode
  /** On the button, a verb. */
  act: string
  destructive?: boolean
  reasonHint?: string
  pending: boolean
  error: unknown
  onAct: (reason: string) => void
  blocked?: string | undefined
  children?: ReactNode
}

const shortest = 3
const longest = 500

/** For acts that change what an arm will do: names the act, the target and the consequence, and takes a reason that is kept. */
export function ActDialog({
  onClose,
  title,
  consequence,
  act,
  destructive = false,
  reasonHint,
  pending,
  error,
  onAct,
  blocked,
  children,
}: ActDialogProps) {
  const [reason, setReason] = useState('')
  const [tried, setTried] = useState(false)
  const tooShort = reason.trim().length < shortest
  return (
    <Dialog open onClose={onClose} title={title} description={consequence}>
      <form
        className="flex flex-col gap-4"
        onSubmit={(event) => {
          event.preventDefault()
          setTried(true)
          if (!tooShort && !pending && blocked === undefined) onAct(reason.trim())
        }}
      >
        {children}
        <TextArea
          label="Reason"
          hint={reasonHint ?? 'Kept in the history, with your name.'}
          error={tried && tooShort ? `A few words are needed, at least ${shortest} letters.` : undefined}
          value={reason}
          maxLength={longest}
          autoFocus
          onChange={(event) => setReason(event.target.value)}
        />
        {error != null && <InlineFailure error={error} />}
        <DialogActions>
          <Button onClick={onClose}>Leave as it is</Button>
          <Button type="submit" look={destructive ? 'stop' : 'primary'} pending={pending} blocked={blocked}>
            {act}
          </Button>
        </DialogActions>
      </form>
    </Dialog>
  )
}

import { useState } from 'react'
import { Button } from './button.tsx'

/** Copies a text; says so, or asks for the old way where the browser refuses. */
export function CopyButton({ text, label = 'Copy' }: { text: string; label?: string }) {
  const [outcome, setOutcome] = useState<'copied' | 'refused'>()
  return (
    <Button
      icon={outcome === 'copied' ? 'check' : 'copy'}
      onClick={() =>
        navigator.clipboard.writeText(text).then(
          () => setOutcome('copied'),
          () => setOutcome('refused'),
        )
      }
    >
      <span aria-live="polite">
        {outcome === 'copied' ? 'Copied' : outcome === 'refused' ? 'Select it and copy by hand' : label}
      </span>
    </Button>
  )
}

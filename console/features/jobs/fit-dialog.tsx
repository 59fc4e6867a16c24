import { useMutation, useQueryClient } from '@tanstack/react-query'
import { useState } from 'react'
import { useNavigate } from 'react-router-dom'
import { Button } from '../../components/button.tsx'
import { Dialog, DialogActions } from '../../components/dialog.tsx'
import { SelectField, TextField } from '../../components/field.tsx'
import { NumberField, wholeProblem } from '../../components/number-field.tsx'
import { InlineFailure } from '../../components/states.tsx'
import { faultAt } from '../../lib/failures.ts'
import { paths } from '../../lib/paths.ts'
import { createJobOptions } from './jobs.ts'

/** Sizes as typed, "64, 64", or what is wrong with them. */
function hiddenSizes(text: string): number[] | string {
  const sizes = text
    .split(/[\s,]+/)
    .filter(Boolean)
    .map(Number)
  const fine = sizes.length <= 6 && sizes.every((size) => Number.isInteger(size) && size >= 1 && size <= 512)
  return fine ? sizes : 'Up to six whole numbers from 1 to 512, with commas between them.'
}

export function FitDialog({ models, onClose }: { models: string[]; onClose: () => void }) {
  const create = useMutation(createJobOptions(useQueryClient()))
  const navigate = useNavigate()
  const [model, setModel] = useState(models[0] ?? '')
  const [hidden, setHidden] = useState('64, 64')
  const [activation, setActivation] = useState<'relu' | 'tanh'>('relu')
  const [epochs, setEpochs] = useState('')
  const [seed, setSeed] = useState('1')
  const [tried, setTried] = useState(false)
  const sizes = hiddenSizes(hidden)
  const wrong = {
    hidden: typeof sizes === 'string' ? sizes : undefined,
    epochs: wholeProblem(epochs, 1, 2000),
    seed: wholeProblem(seed, 0, 4294967295),
  }
  return (
    <Dialog
      open
      onClose={onClose}
      title="Fit a base network"
      description="Trained on the arm’s recordings with use fit; every fifth is held out, and the figures come from those. The result is a new version, which serves nothing until it is released."
    >
      <form
        className="flex flex-col gap-4"
        onSubmit={(event) => {
          event.preventDefault()
          setTried(true)
          if (typeof sizes === 'string' || wrong.epochs || wrong.seed || create.isPending) return
          create.mutate(
            {
              kind: 'fit',
              model,
              hidden: sizes,
              activation,
              ...(seed.trim() !== '' && { seed: Number(seed) }),
              ...(epochs.trim() !== '' && { epochs: Number(epochs) }),
            },
            { onSuccess: (job) => void navigate(paths.job(job.id)) },
          )
        }}
      >
        <SelectField label="Model" value={model} onChange={(event) => setModel(event.target.value)}>
          {models.map((name) => (
            <option key={name}>{name}</option>
          ))}
        </SelectField>
        <div className="grid gap-4 sm:grid-cols-2">
          <TextField
            label="Hidden layers"
            value={hidden}
            onChange={(event) => setHidden(event.target.value)}
            hint="Sizes, first to last."
            error={faultAt(create.error, '/hidden') ?? (tried ? wrong.hidden : undefined)}
          />
          <SelectField
            label="Activation"
            value={activation}
            onChange={(event) => setActivation(event.target.value as 'relu' | 'tanh')}
          >
            <option>relu</option>
            <option>tanh</option>
          </SelectField>
          <NumberField
            label="Epochs"
            value={epochs}
            onChange={setEpochs}
            hint="Empty: chosen by the amount of data."
            error={tried ? wrong.epochs : undefined}
          />
          <NumberField
            label="Seed"
            value={seed}
            onChange={setSeed}
            hint="The same seed and data give the same network."
            error={tried ? wrong.seed : undefined}
          />
        </div>
        {create.error && <InlineFailure error={create.error} />}
        <DialogActions>
          <Button onClick={onClose}>Not now</Button>
          <Button type="submit" look="primary" pending={create.isPending}>
            Start fitting
          </Button>
        </DialogActions>
      </form>
    </Dialog>
  )
}

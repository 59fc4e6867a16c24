import { useMutation, useQueryClient } from '@tanstack/react-query'
import { useState } from 'react'
import { useNavigate } from 'react-router-dom'
import { Button } from '../../components/button.tsx'
import { Dialog, DialogActions } from '../../components/dialog.tsx'
import { SelectField, TextField } from '../../components/field.tsx'
import { NumberField, wholeProblem } from '../../components/number-field.tsx'
import { InlineFailure } from '../../components/states.tsx'
import { faultAt } from '../../lib/failures.ts'
import { nameProblem } from '../../lib/names.ts'
import { paths } from '../../lib/paths.ts'
import { createJobOptions } from './jobs.ts'

type Scheme = 'all' | 'last_layer' | 'bias'
type Kind = 'state_dependent' | 'structured' | 'unstructured'

interface MetaTrainDialogProps {
  losses: { name: string; model: string }[]
  models: string[]
  kinds: { kind: Kind; label: string; means: string }[]
  /** Starts a loss that is not there yet. */
  createLoss: (loss: { name: string; model: string; kind: Kind }) => Promise<unknown>
  onClose: () => void
}

const fresh = ''

export function MetaTrainDialog({ losses, models, kinds, createLoss, onClose }: MetaTrainDialogProps) {
  const create = useMutation(createJobOptions(useQueryClient()))
  const makeLoss = useMutation({ mutationFn: createLoss })
  const navigate = useNavigate()
  const [loss, setLoss] = useState(losses[0]?.name ?? fresh)
  const [name, setName] = useState('')
  const [model, setModel] = useState(models[0] ?? '')
  const [kind, setKind] = useState<Kind>('state_dependent')
  const [scheme, setScheme] = useState<Scheme>('all')
  const [updates, setUpdates] = useState('')
  const [seed, setSeed] = useState('')
  const [tried, setTried] = useState(false)
  const isNew = loss === fresh
  const wrong = {
    name: isNew ? nameProblem(name) : undefined,
    updates: wholeProblem(updates, 1, 20_000),
    seed: wholeProblem(seed, 0, 4294967295),
  }
  const pending = makeLoss.isPending || create.isPending
  const start = async () => {
    if (isNew) {
      await makeLoss.mutateAsync({ name, model, kind })
      // The job may still be refused; then the loss is there and chosen.
      setLoss(name)
    }
    const job = await create.mutateAsync({
      kind: 'meta_train',
      loss: isNew ? name : loss,
      scheme,
      ...(updates.trim() !== '' && { updates: Number(updates) }),
      ...(seed.trim() !== '' && { seed: Number(seed) }),
    })
    void navigate(paths.job(job.id))
  }
  return (
    <Dialog
      open
      onClose={onClose}
      title="Meta-train a loss"
      description="Learns, on the arm’s recordings with use meta-train, the loss under which a few steps help most; rates are chosen on those with use validate. The result is a version of the loss, for the base version it was learned with."
    >
      <form
        className="flex flex-col gap-4"
        onSubmit={(event) => {
          event.preventDefault()
          setTried(true)
          if (wrong.name || wrong.updates || wrong.seed || pending) return
          // What is refused is shown below.
          start().catch(() => undefined)
        }}
      >
        <SelectField label="Loss" value={loss} onChange={(event) => setLoss(event.target.value)}>
          {losses.map((each) => (
            <option key={each.name} value={each.name}>
              {each.name}
            </option>
          ))}
          {isNew || !losses.some((each) => each.name === loss) ? (
            <option value={loss}>{isNew ? 'a new one' : loss}</option>
          ) : (
            <option value={fresh}>a new one</option>
          )}
        </SelectField>
        {isNew && (
          <div className="grid gap-4 border-l-2 border-line pl-4">
            <TextField
              label="Name"
              value={name}
              maxLength={64}
              hint="Small letters, digits and hyphens."
              onChange={(event) => setName(event.target.value)}
              error={faultAt(makeLoss.error, '/name') ?? (tried ? wrong.name : undefined)}
            />
            <SelectField label="Model" value={model} onChange={(event) => setModel(event.target.value)}>
              {models.map((each) => (
                <option key={each}>{each}</option>
              ))}
            </SelectField>
            <SelectField
              label="Kind"
              value={kind}
              onChange={(event) => setKind(event.target.value as Kind)}
              hint={kinds.find((each) => each.kind === kind)!.means}
            >
              {kinds.map((each) => (
                <option key={each.kind} value={each.kind}>
                  {each.label}
                </option>
              ))}
            </SelectField>
          </div>
        )}
        <SelectField
          label="Changes"
          value={scheme}
          onChange={(event) => setScheme(event.target.value as Scheme)}
          hint="What an adaptation with this loss changes."
        >
          <option value="all">all layers</option>
          <option value="last_layer">last layer</option>
          <option value="bias">bias per joint</option>
        </SelectField>
        <div className="grid gap-4 sm:grid-cols-2">
          <NumberField
            label="Updates"
            value={updates}
            onChange={setUpdates}
            hint="Empty: 800."
            error={tried ? wrong.updates : undefined}
          />
          <NumberField label="Seed" value={seed} onChange={setSeed} hint="Empty: 1." error={tried ? wrong.seed : undefined} />
        </div>
        {(makeLoss.error ?? create.error) && <InlineFailure error={makeLoss.error ?? create.error} />}
        <DialogActions>
          <Button onClick={onClose}>Not now</Button>
          <Button type="submit" look="primary" pending={pending}>
            Start meta-training
          </Button>
        </DialogActions>
      </form>
    </Dialog>
  )
}

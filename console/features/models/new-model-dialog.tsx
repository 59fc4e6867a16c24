import { useMutation, useQueryClient } from '@tanstack/react-query'
import { useState } from 'react'
import { useNavigate } from 'react-router-dom'
import { Button } from '../../components/button.tsx'
import { Dialog, DialogActions } from '../../components/dialog.tsx'
import { SelectField, TextArea, TextField } from '../../components/field.tsx'
import { InlineFailure } from '../../components/states.tsx'
import { faultAt } from '../../lib/failures.ts'
import { nameProblem } from '../../lib/names.ts'
import { paths } from '../../lib/paths.ts'
import { createModelOptions } from './models.ts'

export function NewModelDialog({ arms, onClose }: { arms: string[]; onClose: () => void }) {
  const create = useMutation(createModelOptions(useQueryClient()))
  const navigate = useNavigate()
  const [name, setName] = useState('')
  const [arm, setArm] = useState(arms[0] ?? '')
  const [description, setDescription] = useState('')
  const [tried, setTried] = useState(false)
  const wrong = nameProblem(name)
  return (
    <Dialog
      open
      onClose={onClose}
      title="Start a model"
      description="A model of one arm, still without versions: they follow by fitting, import or promotion, and serve once one is released."
    >
      <form
        className="flex flex-col gap-4"
        onSubmit={(event) => {
          event.preventDefault()
          setTried(true)
          if (wrong || create.isPending) return
          create.mutate(
            { name, arm, ...(description !== '' && { description }) },
            { onSuccess: (model) => void navigate(paths.model(model.name)) },
          )
        }}
      >
        <TextField
          label="Name"
          value={name}
          autoFocus
          maxLength={64}
          hint="Small letters, digits and hyphens; controllers ask for torques by it, so it can’t be changed later."
          onChange={(event) => setName(event.target.value)}
          error={faultAt(create.error, '/name') ?? (tried ? wrong : undefined)}
        />
        <SelectField label="Arm" value={arm} onChange={(event) => setArm(event.target.value)}>
          {arms.map((each) => (
            <option key={each}>{each}</option>
          ))}
        </SelectField>
        <TextArea
          label="What it is for"
          hint="Optional."
          value={description}
          maxLength={2000}
          onChange={(event) => setDescription(event.target.value)}
        />
        {create.error && <InlineFailure error={create.error} />}
        <DialogActions>
          <Button onClick={onClose}>Not now</Button>
          <Button type="submit" look="primary" pending={create.isPending}>
            Start model
          </Button>
        </DialogActions>
      </form>
    </Dialog>
  )
}

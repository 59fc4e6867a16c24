import { useMutation, useQueryClient } from '@tanstack/react-query'
import { useState } from 'react'
import { Button } from '../../components/button.tsx'
import { Dialog, DialogActions } from '../../components/dialog.tsx'
import { Field, SelectField } from '../../components/field.tsx'
import { useNotice } from '../../components/notices.tsx'
import { InlineFailure } from '../../components/states.tsx'
import { bytes, counted } from '../../lib/numbers.ts'
import { uploadOptions, uses, type RecordingUse } from './recordings.ts'

const largest = 200_000_000

/** Uploads files one after the other, so that a broken one says which it was and the others are not lost. */
export function UploadDialog({ arms, onClose }: { arms: string[]; onClose: () => void }) {
  const upload = useMutation(uploadOptions(useQueryClient()))
  const say = useNotice()
  const [arm, setArm] = useState(arms[0] ?? '')
  const [use, setUse] = useState<RecordingUse>('fit')
  const [files, setFiles] = useState<File[]>([])
  const [at, setAt] = useState(0)
  const [tried, setTried] = useState(false)
  const tooLarge = files.find((file) => file.size > largest)
  const problem =
    files.length === 0
      ? 'Choose at least one CSV file.'
      : tooLarge && `${tooLarge.name} is larger than 200 MB. Split it, at a moment of rest.`
  const total = bytes(files.reduce((sum, file) => sum + file.size, 0))
  const send = async () => {
    let known = 0
    for (let index = at; index < files.length; index++) {
      setAt(index)
      const { stored } = await upload.mutateAsync({ arm, use, file: files[index]! })
      if (!stored) known++
    }
    say(`${counted(files.length, 'recording')} uploaded${known > 0 ? `, ${known} of them stored already` : ''}.`)
    onClose()
  }
  return (
    <Dialog
      open
      held={upload.isPending}
      onClose={onClose}
      title="Upload recordings"
      description="CSV with a header: time, then position_, velocity_, acceleration_ and torque_ (or effort_) of every joint, in SI units. The columns may stand in any order."
    >
      <form
        className="flex flex-col gap-4"
        onSubmit={(event) => {
          event.preventDefault()
          setTried(true)
          // A refusal is shown below; the loop only stops.
          if (!problem && !upload.isPending) send().catch(() => undefined)
        }}
      >
        <SelectField label="Arm" value={arm} onChange={(event) => setArm(event.target.value)}>
          {arms.map((name) => (
            <option key={name}>{name}</option>
          ))}
        </SelectField>
        <SelectField
          label="Use"
          value={use}
          onChange={(event) => setUse(event.target.value as RecordingUse)}
          hint={uses.find((each) => each.use === use)!.means}
        >
          {uses.map((each) => (
            <option key={each.use} value={each.use}>
              {each.label}
            </option>
          ))}
        </SelectField>
        <Field
          label="Files"
          hint={files.length > 0 ? `${counted(files.length, 'file')}, ${total.value} ${total.unit}` : 'Up to 200 MB each.'}
          error={tried ? problem : undefined}
        >
          {(props) => (
            <input
              {...props}
              type="file"
              multiple
              accept=".csv,text/csv"
              onChange={(event) => {
                setFiles([...(event.target.files ?? [])])
                setAt(0)
                upload.reset()
              }}
            />
          )}
        </Field>
        {upload.isPending && (
          <p role="status">
            Sending {files[at]?.name}{' '}
            <span className="num text-soft">
              ({at + 1} of {files.length})
            </span>
          </p>
        )}
        {upload.error && (
          <div>
            <p className="mb-1 font-semibold">{files[at]?.name}</p>
            <InlineFailure error={upload.error} />
          </div>
        )}
        <DialogActions>
          <Button onClick={onClose} blocked={upload.isPending ? 'Wait for the file that is being sent.' : undefined}>
            Close
          </Button>
          <Button type="submit" look="primary" pending={upload.isPending}>
            {upload.error ? 'Go on from this file' : 'Upload'}
          </Button>
        </DialogActions>
      </form>
    </Dialog>
  )
}

import { useMutation, useQueryClient } from '@tanstack/react-query'
import { ActDialog } from '../../components/act-dialog.tsx'
import { useNotice } from '../../components/notices.tsx'
import { cancelJobOptions, jobKinds, subjectOf, type Job } from './jobs.ts'

export function CancelJobDialog({ job, onClose }: { job: Job; onClose: () => void }) {
  const client = useQueryClient()
  const say = useNotice()
  const cancel = useMutation(cancelJobOptions(client, job.id))
  const name = `${jobKinds[job.kind].toLowerCase()} of ${subjectOf(job)}`
  return (
    <ActDialog
      title={`Cancel the ${name}`}
      act="Cancel the job"
      destructive
      consequence="It stops and makes no version. What it has computed so far is lost; its curves stay."
      onClose={onClose}
      pending={cancel.isPending}
      error={cancel.error}
      onAct={(reason) =>
        cancel.mutate(reason, {
          onSuccess: () => {
            say(`The ${name} is being cancelled.`)
            onClose()
          },
        })
      }
    />
  )
}

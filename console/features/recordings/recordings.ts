import { mutationOptions, queryOptions, type QueryClient } from '@tanstack/react-query'
import type { Schemas } from '../../../sdk/index.ts'
import { heftwise } from '../../lib/client.ts'
import { everything } from '../../lib/everything.ts'

export type Recording = Schemas['Recording']
export type RecordingUse = Schemas['RecordingUse']

export const recordingsOptions = queryOptions({
  queryKey: ['recordings'],
  queryFn: ({ signal }) => everything((cursor) => heftwise.recordings.list({ cursor, limit: 200, signal })),
  refetchInterval: 15_000,
})

export const uses: { use: RecordingUse; label: string; means: string }[] = [
  { use: 'fit', label: 'fit', means: 'base networks are fitted on it' },
  { use: 'meta_train', label: 'meta-train', means: 'losses are learned on it' },
  { use: 'validate', label: 'validate', means: 'rates and settings are chosen on it' },
  { use: 'evaluate', label: 'evaluate', means: 'only figures are reported on it; no training takes it' },
]

export interface Upload {
  arm: string
  use: RecordingUse
  file: File
}

const refreshed = (client: QueryClient) => ({ onSettled: () => client.invalidateQueries({ queryKey: ['recordings'] }) })

export const uploadOptions = (client: QueryClient) =>
  mutationOptions({
    mutationFn: ({ arm, use, file }: Upload) => heftwise.recordings.upload({ arm, use, file, fileName: file.name }),
    ...refreshed(client),
  })

export const deleteRecordingOptions = (client: QueryClient, id: string) =>
  mutationOptions({ mutationFn: (reason: string) => heftwise.recordings.delete(id, reason), ...refreshed(client) })

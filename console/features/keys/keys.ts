import { mutationOptions, queryOptions, type QueryClient } from '@tanstack/react-query'
import type { Schemas } from '../../../sdk/index.ts'
import { heftwise } from '../../lib/client.ts'
import { everything } from '../../lib/everything.ts'

export type Key = Schemas['Key']
export type Scope = Schemas['Scope']
export type KeyWithSecret = Schemas['KeyWithSecret']

export const keysOptions = queryOptions({
  queryKey: ['keys'],
  queryFn: ({ signal }) => everything((cursor) => heftwise.keys.list({ cursor, limit: 200, signal })),
  refetchInterval: 15_000,
})

const refreshed = (client: QueryClient) => ({ onSettled: () => client.invalidateQueries({ queryKey: ['keys'] }) })

/** A secret is in one answer only: it is handed to the caller and never kept in the cache. */
export const createKeyOptions = (client: QueryClient) =>
  mutationOptions({ mutationFn: (body: Schemas['NewKey']) => heftwise.keys.create(body), gcTime: 0, ...refreshed(client) })

export const rotateKeyOptions = (client: QueryClient, id: string) =>
  mutationOptions({
    mutationFn: (overlapSeconds: number) => heftwise.keys.rotate(id, { overlap_seconds: overlapSeconds }),
    gcTime: 0,
    ...refreshed(client),
  })

export const revokeKeyOptions = (client: QueryClient, id: string) =>
  mutationOptions({ mutationFn: (reason: string) => heftwise.keys.revoke(id, reason), ...refreshed(client) })

export const scopes: { scope: Scope; allows: string }[] = [
  { scope: 'predict', allows: 'Ask for torques, fetch snapshots, read arms and models' },
  { scope: 'adapt', allows: 'Start adaptations, post batches and events, freeze, reset, end' },
  { scope: 'read', allows: 'Read everything except people and secrets' },
  { scope: 'build', allows: 'Make arms, recordings, models, losses, jobs; promote' },
  { scope: 'release', allows: 'Release versions and roll back' },
]

import { mutationOptions, queryOptions, type QueryClient } from '@tanstack/react-query'
import type { Schemas } from '../../../sdk/index.ts'
import { heftwise } from '../../lib/client.ts'
import { everything } from '../../lib/everything.ts'

export type Model = Schemas['Model']
export type ModelWithEtag = Model & { etag: string }
export type Version = Schemas['Version']
export type Release = Schemas['Release']

export const modelsOptions = queryOptions({
  queryKey: ['models'],
  queryFn: ({ signal }) => everything((cursor) => heftwise.models.list({ cursor, limit: 200, archived: true, signal })),
  refetchInterval: 10_000,
})

export const modelOptions = (name: string) =>
  queryOptions({
    queryKey: ['models', name],
    queryFn: ({ signal }) => heftwise.models.get(name, { signal }),
    refetchInterval: 5_000,
  })

export const versionsOptions = (name: string) =>
  queryOptions({
    queryKey: ['models', name, 'versions'],
    queryFn: ({ signal }) => everything((cursor) => heftwise.models.versions(name, { cursor, limit: 200, signal })),
    refetchInterval: 10_000,
  })

export const releasesOptions = (name: string) =>
  queryOptions({
    queryKey: ['models', name, 'releases'],
    queryFn: ({ signal }) => everything((cursor) => heftwise.models.releases(name, { cursor, limit: 200, signal })),
    refetchInterval: 10_000,
  })

/** After a release, refused or not, everything about the model is read anew. */
const refreshed = (client: QueryClient) => ({
  onSettled: () => client.invalidateQueries({ queryKey: ['models'] }),
})

export const createModelOptions = (client: QueryClient) =>
  mutationOptions({ mutationFn: (body: Schemas['NewModel']) => heftwise.models.create(body), ...refreshed(client) })

export const releaseOptions = (client: QueryClient, name: string) =>
  mutationOptions({
    mutationFn: ({ version, reason, etag }: { version: number; reason: string; etag: string }) =>
      heftwise.models.release(name, { version, reason }, etag),
    ...refreshed(client),
  })

export const rollBackOptions = (client: QueryClient, name: string) =>
  mutationOptions({
    mutationFn: ({ to, reason, etag }: { to: number; reason: string; etag: string }) =>
      heftwise.models.rollBack(name, { reason, to }, etag),
    ...refreshed(client),
  })

/** Formerly live versions, the latest first, without the one that is live. */
export function formerVersions(releases: Release[], live: number | null): number[] {
  const versions: number[] = []
  for (const release of releases) {
    for (const version of [release.version, release.previous_version])
      if (version !== null && version !== live && !versions.includes(version)) versions.push(version)
  }
  return versions
}

import { keepPreviousData, mutationOptions, queryOptions, type QueryClient } from '@tanstack/react-query'
import type { QueryOf, Schemas } from '../../../sdk/index.ts'
import { heftwise } from '../../lib/client.ts'
import { everything } from '../../lib/everything.ts'

export type Adaptation = Schemas['Adaptation']
export type LogEntry = Schemas['LogEntry']
export type BatchRows = Schemas['BatchRows']
export type Verdict = Schemas['Verdict']

/** Those that serve: what an overview is about, however many have ended. */
export const runningOptions = queryOptions({
  queryKey: ['adaptations', 'running'],
  queryFn: async ({ signal }) => {
    const [adapting, frozen] = await Promise.all(
      (['adapting', 'frozen'] as const).map((state) =>
        everything((cursor) => heftwise.adaptations.list({ cursor, state, limit: 200, signal })),
      ),
    )
    return [...adapting!.items, ...frozen!.items]
  },
  refetchInterval: 3_000,
})

export const adaptationsOptions = queryOptions({
  queryKey: ['adaptations'],
  queryFn: ({ signal }) => everything((cursor) => heftwise.adaptations.list({ cursor, limit: 200, signal })),
  // A long list takes many requests, so it is asked for less often.
  refetchInterval: ({ state }) => ((state.data?.items.length ?? 0) > 200 ? 30_000 : 3_000),
})

export const adaptationOptions = (id: string) =>
  queryOptions({
    queryKey: ['adaptations', id],
    queryFn: ({ signal }) => heftwise.adaptations.get(id, { signal }),
    refetchInterval: ({ state }) => (state.data?.state === 'ended' ? false : 1_000),
  })

const kept = 600
const pageLimit = 200

/**
 * The newest part of the log, oldest first. Each poll asks for a short page and only reads further back where the robot
 * was faster than that.
 */
export const historyOptions = (client: QueryClient, id: string, ended: boolean) =>
  queryOptions({
    queryKey: ['adaptations', id, 'history'],
    queryFn: async ({ signal, queryKey }): Promise<LogEntry[]> => {
      const before = client.getQueryData<LogEntry[]>(queryKey) ?? []
      const newestKnown = before.at(-1)?.position ?? 0
      const found: LogEntry[] = []
      let cursor: string | undefined
      do {
        const page = await heftwise.adaptations.log(id, {
          cursor,
          limit: newestKnown > 0 && cursor === undefined ? 10 : pageLimit,
          signal,
        })
        found.push(...page.items.filter((entry) => entry.position > newestKnown))
        cursor = page.items.some((entry) => entry.position <= newestKnown) ? undefined : (page.next_cursor ?? undefined)
      } while (cursor !== undefined && found.length < kept)
      return found.length === 0 ? before : [...before, ...found.reverse()].slice(-kept)
    },
    structuralSharing: false,
    refetchInterval: ended ? false : 1_000,
  })

/** The error's way over the newest batches, for an overview of many. */
export const trendOptions = (id: string, ended: boolean) =>
  queryOptions({
    queryKey: ['adaptations', id, 'trend'],
    queryFn: async ({ signal }) => {
      const page = await heftwise.adaptations.log(id, { entry: 'batch', limit: 60, signal })
      return page.items.toReversed().flatMap((entry) => (entry.error ? [entry.error.before] : []))
    },
    refetchInterval: ended ? false : 5_000,
    staleTime: 4_000,
  })

export const rowsOptions = (id: string, position: number) =>
  queryOptions({
    queryKey: ['adaptations', id, 'rows', position],
    queryFn: ({ signal }) => heftwise.adaptations.rows(id, position, { signal }),
    // A stored batch never changes.
    staleTime: 'static',
    gcTime: 20_000,
    placeholderData: keepPreviousData,
  })

export const logOptions = (
  id: string,
  query: Pick<QueryOf<'listAdaptationLog'>, 'cursor' | 'entry' | 'verdict'>,
  live: boolean,
) =>
  queryOptions({
    queryKey: ['adaptations', id, 'log', query],
    queryFn: ({ signal }) => heftwise.adaptations.log(id, { ...query, limit: 25, signal }),
    // Older pages hold still while somebody reads them.
    refetchInterval: live && query.cursor === undefined ? 2_000 : false,
    placeholderData: keepPreviousData,
  })

export type Command = 'freeze' | 'resume' | 'reset' | 'end'

export const commandOptions = (client: QueryClient, id: string) =>
  mutationOptions({
    mutationFn: ({ command, reason }: { command: Command; reason: string }) => heftwise.adaptations[command](id, reason),
    onSuccess: (adaptation) => client.setQueryData(adaptationOptions(id).queryKey, adaptation),
    onSettled: () => client.invalidateQueries({ queryKey: ['adaptations'] }),
  })

export const promoteOptions = (client: QueryClient, id: string) =>
  mutationOptions({
    mutationFn: (reason: string) => heftwise.adaptations.promote(id, reason),
    onSettled: () => client.invalidateQueries({ queryKey: ['models'] }),
  })

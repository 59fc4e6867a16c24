import { mutationOptions, queryOptions, type QueryClient } from '@tanstack/react-query'
import type { Schemas } from '../../../sdk/index.ts'
import { heftwise } from '../../lib/client.ts'
import { everything } from '../../lib/everything.ts'

export type Loss = Schemas['Loss']

export const lossesOptions = queryOptions({
  queryKey: ['losses'],
  queryFn: ({ signal }) => everything((cursor) => heftwise.losses.list({ cursor, limit: 200, signal })),
  staleTime: 10_000,
})

/** `mse` is always there and needs no learning. */
export const learnedKinds: { kind: Exclude<Schemas['LossKind'], 'mse'>; label: string; means: string }[] = [
  { kind: 'state_dependent', label: 'state-dependent', means: 'a weight per joint that depends on the state; the usual choice' },
  { kind: 'structured', label: 'structured', means: 'one learned weight per joint' },
  { kind: 'unstructured', label: 'unstructured', means: 'a small network of predicted and measured torque' },
]

export const createLossOptions = (client: QueryClient) =>
  mutationOptions({
    mutationFn: (body: Schemas['NewLoss']) => heftwise.losses.create(body),
    onSettled: () => client.invalidateQueries({ queryKey: ['losses'] }),
  })

export type LossVersion = Schemas['LossVersion']

export const lossOptions = (name: string) =>
  queryOptions({
    queryKey: ['losses', name],
    queryFn: ({ signal }) => heftwise.losses.get(name, { signal }),
    refetchInterval: 15_000,
  })

export const lossVersionsOptions = (name: string) =>
  queryOptions({
    queryKey: ['losses', name, 'versions'],
    queryFn: ({ signal }) => everything((cursor) => heftwise.losses.versions(name, { cursor, limit: 200, signal })),
    refetchInterval: 15_000,
  })

export const kindNames: Record<Schemas['LossKind'], string> = {
  mse: 'mean squared error',
  structured: 'structured',
  state_dependent: 'state-dependent',
  unstructured: 'unstructured',
}

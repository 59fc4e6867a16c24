import { queryOptions } from '@tanstack/react-query'
import type { Schemas } from '../../../sdk/index.ts'
import { heftwise } from '../../lib/client.ts'
import { everything } from '../../lib/everything.ts'

export type Arm = Schemas['Arm']

export const armsOptions = queryOptions({
  queryKey: ['arms'],
  queryFn: ({ signal }) => everything((cursor) => heftwise.arms.list({ cursor, limit: 200, signal })),
  staleTime: 30_000,
})

export const armOptions = (name: string) =>
  queryOptions({
    queryKey: ['arms', name],
    queryFn: ({ signal }) => heftwise.arms.get(name, { signal }),
    staleTime: 30_000,
  })

export const fallbackNames: Record<Arm['fallback'], string> = {
  gravity_only: 'gravity only',
  hold_position: 'hold position',
  controlled_stop: 'controlled stop',
  zero_torque: 'zero torque',
}

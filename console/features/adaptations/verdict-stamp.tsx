import { Stamp } from '../../components/stamp.tsx'
import type { Verdict } from './adaptations.ts'

export function VerdictStamp({ verdict }: { verdict: Verdict }) {
  switch (verdict) {
    case 'accepted':
      return (
        <Stamp tone="live" mark="dot">
          accepted
        </Stamp>
      )
    case 'rejected':
      return (
        <Stamp tone="load" mark="ring">
          rejected
        </Stamp>
      )
    case 'stored':
      return (
        <Stamp tone="soft" mark="bar">
          stored
        </Stamp>
      )
  }
}

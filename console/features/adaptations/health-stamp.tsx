import { Stamp } from '../../components/stamp.tsx'
import type { Health } from './health.ts'

/** The state of an adaptation, as it is everywhere. */
export function HealthStamp({ health }: { health: Health }) {
  switch (health.state) {
    case 'adapting':
      return (
        <Stamp tone="live" mark="wave">
          adapting
        </Stamp>
      )
    case 'rejecting':
      return (
        <Stamp tone="load" mark="diamond">
          rejecting steps
        </Stamp>
      )
    case 'silent':
      return (
        <Stamp tone="load" mark="ring">
          silent
        </Stamp>
      )
    case 'frozen':
      return (
        <Stamp tone="stop" mark="pause">
          frozen
        </Stamp>
      )
    case 'ended':
      return (
        <Stamp tone="soft" mark="bar">
          ended
        </Stamp>
      )
  }
}

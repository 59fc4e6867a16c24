import { Stamp } from '../../components/stamp.tsx'
import type { Job } from './jobs.ts'

export function JobStamp({ job }: { job: Job }) {
  switch (job.state) {
    case 'queued':
      return (
        <Stamp tone="soft" mark="ring">
          queued
        </Stamp>
      )
    case 'running':
      return (
        <Stamp tone="live" mark="half">
          running
        </Stamp>
      )
    case 'done':
      return (
        <Stamp tone="ink" mark="check">
          done
        </Stamp>
      )
    case 'failed':
      return (
        <Stamp tone="stop" mark="cross">
          failed
        </Stamp>
      )
    case 'cancelled':
      return (
        <Stamp tone="soft" mark="bar">
          cancelled
        </Stamp>
      )
  }
}

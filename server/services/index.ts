import { createKernels } from '../../shared/dynamics/index.ts'
import type { Dependencies } from '../dependencies.ts'
import { createAdaptationService } from './adaptations/index.ts'
import { createArmService } from './arms.ts'
import { createJobService } from './jobs/jobs.ts'
import { createKeyService } from './keys.ts'
import { createLiveVersions } from './live-versions.ts'
import { createLossService } from './losses.ts'
import { createModelService } from './models.ts'
import { createPeopleService } from './people.ts'
import { createPredictions } from './predictions.ts'
import { createRecordingService } from './recordings/recordings.ts'
import { createReleaseService } from './releases.ts'
import { createSessionService } from './sessions.ts'
import { createVersionService } from './versions.ts'

/** Every service, made once. Add yours here: one line each. */
export function createServices(d: Dependencies) {
  const sessions = createSessionService(d)
  const people = createPeopleService(d)
  const keys = createKeyService(d)
  const arms = createArmService(d)
  const recordings = createRecordingService(d)
  const models = createModelService(d)
  const versions = createVersionService(d)
  const releases = createReleaseService(d)
  const losses = createLossService(d)
  const jobs = createJobService({ ...d, recordings, versions, losses })
  const kernels = createKernels()
  const liveVersions = createLiveVersions({ ...d, kernels })
  const predictions = createPredictions()
  const adaptations = createAdaptationService({ ...d, kernels, liveVersions, predictions, versions })
  return { sessions, people, keys, arms, recordings, models, versions, releases, losses, jobs, liveVersions, predictions, adaptations }
}

export type Services = ReturnType<typeof createServices>

/** A service that works by itself, besides answering calls, has these. */
interface Running {
  start?(): Promise<void>
  stop?(): Promise<void>
}

export async function startServices(services: Services): Promise<void> {
  for (const service of Object.values(services) as Running[]) await service.start?.()
}

/** In reverse, so that what a service uses outlives it. */
export async function stopServices(services: Services): Promise<void> {
  for (const service of (Object.values(services) as Running[]).reverse()) await service.stop?.()
}

import { createReadStream, readFileSync } from 'node:fs'
import { createGunzip, gunzipSync } from 'node:zlib'
import type { components } from '../../shared/contract/openapi.generated.ts'
import { Refusal, type ProblemSlug } from '../../shared/contract/problems.ts'
import type { LearnedLossKind } from '../../shared/dynamics/loss-version.ts'
import type { RecordingUse } from '../models/recording.ts'
import { armFromWire } from '../routes/arms.ts'
import { metricsFromWire } from '../routes/version-wire.ts'
import type { Services } from '../services/index.ts'
import { modelEtag } from '../services/models.ts'
import type { Caller } from '../services/permissions.ts'

type Schemas = components['schemas']

/** What server/demo/artefacts/demo.json says; `npm run demo:artefacts` writes it. */
interface Demo {
  readonly arm: Schemas['NewArm']
  readonly model: { name: string; arm: string; description: string }
  readonly version: string
  readonly loss: { name: string; model: string; kind: LearnedLossKind; description: string }
  readonly loss_version: string
  readonly recordings: readonly { file: string; name: string; use: RecordingUse; context: Schemas['RecordingContext'] }[]
}

const folder = new URL('artefacts/', import.meta.url)

/**
 * Gives the demo team its simulated arm, recordings, a released base version and a learned loss, from artefacts in the
 * repository. Begun again after it broke off, it goes on with what is missing.
 */
export async function seedDemo(services: Services, caller: Caller): Promise<void> {
  const demo = JSON.parse(readFileSync(new URL('demo.json', folder), 'utf8')) as Demo
  const { arms, models, losses } = services
  await unlessThere('name-taken', () => arms.create(caller, armFromWire(demo.arm)))
  await unlessThere('name-taken', () => models.create(caller, demo.model))
  await unlessThere('name-taken', () => losses.create(caller, demo.loss))
  await importVersion(services, caller, demo)
  await importLossVersion(services, caller, demo)
  for (const recording of demo.recordings) await uploadRecording(services, caller, demo.arm.name, recording)
}

async function importVersion({ models, versions, releases }: Services, caller: Caller, demo: Demo): Promise<void> {
  const { name } = demo.model
  if ((await models.get(caller, name)).newestVersion === null) {
    const snapshot = readArtefact<Schemas['VersionSnapshot']>(demo.version)
    await versions.import(caller, name, {
      jointNames: snapshot.joint_names,
      unit: snapshot.unit,
      description: snapshot.description,
      parameters: snapshot.parameters,
      checksum: snapshot.checksum,
      metrics: metricsFromWire(snapshot.metrics),
    })
  }
  const model = await models.get(caller, name)
  if (model.liveVersion !== null) return
  await releases.release(caller, name, {
    version: 1,
    reason: 'Demo: fitted on simulated recordings without payload.',
    ifMatch: modelEtag(model),
  })
}

async function importLossVersion({ losses }: Services, caller: Caller, demo: Demo): Promise<void> {
  if ((await losses.get(caller, demo.loss.name)).newestVersion !== null) return
  const { checksum, validation = [], ...loss } = readArtefact<Schemas['LossSnapshot']>(demo.loss_version)
  await losses.import(caller, demo.loss.name, { loss, checksum, validation })
}

async function uploadRecording(
  { recordings }: Services,
  caller: Caller,
  arm: string,
  { file, name, use, context }: Demo['recordings'][number],
): Promise<void> {
  const { payload, ...rest } = context
  const source = createReadStream(new URL(file, folder)).pipe(createGunzip())
  await recordings.upload(
    caller,
    {
      arm,
      name,
      use,
      context: { ...rest, ...(payload && { payload: { mass: payload.mass, centerOfMass: payload.center_of_mass } }) },
    },
    source,
  )
}

async function unlessThere(slug: ProblemSlug, make: () => Promise<unknown>): Promise<void> {
  try {
    await make()
  } catch (error) {
    if (!(error instanceof Refusal) || error.kind.slug !== slug) throw error
  }
}

function readArtefact<T>(file: string): T {
  return JSON.parse(gunzipSync(readFileSync(new URL(file, folder))).toString('utf8')) as T
}

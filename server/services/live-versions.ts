import { createPredictor, decodeVersion } from '../../shared/dynamics/index.ts'
import type { ArmLimits, Kernels, Predictor, Version } from '../../shared/dynamics/index.ts'
import { Refusal } from '../../shared/contract/problems.ts'
import type { Database } from '../database/connection.ts'
import type { Arm, StoredTorque } from '../models/arm.ts'
import type { ChangeFeed } from './change-feed.ts'

/** What serving needs to know of an arm. */
export interface ServedArm {
  readonly name: string
  readonly jointNames: readonly string[]
  readonly fingerprint: string
  readonly units: readonly ('N·m' | 'N')[]
  readonly limits: ArmLimits
  /** Seconds for which an adapted prediction stays valid. */
  readonly horizon: number
  readonly torque: StoredTorque
}

/** A version made ready to predict. It never changes; the cache may let go of it when it has not been used for long. */
export interface ServedVersion {
  readonly teamId: string
  readonly modelId: string
  readonly model: string
  readonly versionId: string
  readonly version: number
  readonly checksum: string
  readonly arm: ServedArm
  readonly artefact: Version
  readonly predictor: Predictor
  readonly recommended: { readonly scheme?: 'all' | 'last_layer' | 'bias'; readonly update?: { kind: 'sgd' | 'adam'; rate: number; rowsPerStep: number; fade?: number } }
}

export interface LiveVersions {
  /**
   * The version of that number, or the live one: at once when it is in memory, without a database round trip.
   *
   * @throws {Refusal} not-found, no-live-version
   */
  get(teamId: string, model: string, version?: number): ServedVersion | Promise<ServedVersion>
}

/** Decoded versions kept in memory; each holds its parameters twice and its arm's limits. */
const mostVersions = 128

/**
 * The versions that requests name, and which one is live, in memory. A release, a rollback or an archiving anywhere drops the
 * team's pointers, so that the next request reads them again.
 */
export function createLiveVersions({ database, changeFeed, kernels }: {
  database: Database
  changeFeed: ChangeFeed
  kernels: Kernels
}): LiveVersions {
  const versions = new Map<string, ServedVersion>()
  const pointers = new Map<string, number>()
  const loading = new Map<string, Promise<ServedVersion>>()
  let generation = 0

  const forget = (): void => {
    generation++
    pointers.clear()
    loading.clear()
  }
  for (const kind of ['release', 'version', 'archive'] as const) changeFeed.on(kind, forget)
  changeFeed.onGap(forget)

  const keyOf = (teamId: string, model: string) => `${teamId}/${model}`

  function keep(key: string, served: ServedVersion): ServedVersion {
    versions.set(key, served)
    for (const [oldest, entry] of versions) {
      if (versions.size <= mostVersions) break
      versions.delete(oldest)
      entry.predictor.release()
    }
    return served
  }

  function found(key: string): ServedVersion | undefined {
    const served = versions.get(key)
    if (served !== undefined && versions.size > mostVersions / 2) {
      // Used last, dropped last.
      versions.delete(key)
      versions.set(key, served)
    }
    return served
  }

  async function load(teamId: string, name: string, version: number | undefined): Promise<ServedVersion> {
    const startedIn = generation
    const model = await database.models.Model.findOne({ where: { teamId, name }, include: 'arm' })
    if (model === null) throw new Refusal('not-found', `There is no model "${name}". GET /v1/models lists them.`)
    const number = version ?? model.liveVersion
    if (number === null) throw new Refusal('no-live-version', `Model "${name}" has no live version. Release one, or name a version.`)
    const key = `${keyOf(teamId, name)}/${number}`
    if (version === undefined && startedIn === generation) pointers.set(keyOf(teamId, name), number)
    const known = found(key)
    if (known !== undefined) return known
    const row = await database.models.Version.scope('withArtefact').findOne({ where: { modelId: model.id, number } })
    if (row === null) throw new Refusal('not-found', `Model "${name}" has no version ${number}. GET /v1/models/${name}/versions lists them.`)
    const arm = servedArm(model.arm as Arm)
    const artefact = decodeVersion(row.artefact)
    return versions.get(key) ?? keep(key, {
      teamId, modelId: model.id, model: name, versionId: row.id, version: number, checksum: row.checksum, arm, artefact,
      predictor: createPredictor(kernels, artefact, arm.limits), recommended: row.recommended,
    })
  }

  return {
    get(teamId, model, version) {
      const name = keyOf(teamId, model)
      const number = version ?? pointers.get(name)
      const served = number === undefined ? undefined : found(`${name}/${number}`)
      if (served !== undefined) return served
      const asked = `${name}/${version ?? 'live'}`
      const known = loading.get(asked)
      if (known !== undefined) return known
      const promise = load(teamId, model, version)
      loading.set(asked, promise)
      const done = () => {
        if (loading.get(asked) === promise) loading.delete(asked)
      }
      promise.then(done, done)
      return promise
    },
  }
}

export function servedArm({ name, joints, jointsFingerprint, horizon, torque }: Arm): ServedArm {
  return {
    name,
    jointNames: joints.map((joint) => joint.name),
    fingerprint: jointsFingerprint,
    units: joints.map((joint) => (joint.type === 'prismatic' ? 'N' : 'N·m')),
    limits: limitsOf(joints),
    horizon,
    torque,
  }
}

/** A joint without a stated rate limit may change its torque as fast as it likes. */
export function limitsOf(joints: readonly { torqueLimit: number; torqueRateLimit?: number }[]): ArmLimits {
  const isRateStated = joints.some((joint) => joint.torqueRateLimit !== undefined)
  return {
    torque: Float64Array.from(joints, (joint) => joint.torqueLimit),
    torqueRate: isRateStated ? Float64Array.from(joints, (joint) => joint.torqueRateLimit ?? Number.MAX_VALUE) : null,
  }
}

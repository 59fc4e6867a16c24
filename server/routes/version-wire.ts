import type { components } from '../../shared/contract/openapi.generated.ts'
import { rateLimitsToWire, updateToWire, versionToWire } from '../../shared/contract/snapshots.ts'
import type { StoredJointMetric, StoredMetrics, StoredUpdate, Version } from '../models/version.ts'
import { limitsOf } from '../services/live-versions.ts'
import type { VersionRecord, VersionWithArtefact } from '../services/versions.ts'

type Schemas = components['schemas']

export function versionToJson(version: VersionRecord): Schemas['Version'] {
  const { origin } = version
  return {
    model: version.model,
    version: version.version,
    origin: {
      kind: origin.kind,
      job: origin.job,
      adaptation: origin.adaptation,
      revision: origin.revision,
      parent_version: origin.parentVersion,
      recordings: origin.recordings,
      reason: origin.reason,
    },
    network: version.network,
    checksum: version.checksum,
    metrics: metricsToWire(version.metrics),
    recommended: recommendedToWire(version.recommended),
    created_at: version.createdAt.toISOString(),
    created_by: version.createdBy,
    first_released_at: version.firstReleasedAt?.toISOString() ?? null,
  }
}

export function snapshotToJson({
  model,
  version,
  joints,
  artefact,
  checksum,
  metrics,
}: VersionWithArtefact): Schemas['VersionSnapshot'] {
  return {
    format: 'heftwise-version-1',
    model,
    version,
    joint_names: joints.map(({ name }) => name),
    unit: joints.map(({ type }) => (type === 'prismatic' ? 'N' : 'N·m')),
    torque_limits: joints.map(({ torqueLimit }) => torqueLimit),
    torque_rate_limits: rateLimitsToWire(limitsOf(joints).torqueRate),
    ...versionToWire(artefact),
    checksum,
    metrics: metricsToWire(metrics),
  }
}

export function metricsFromWire(metrics: Schemas['VersionMetrics'] | null | undefined): StoredMetrics | null {
  if (!metrics) return null
  const jointMetrics = (list: Schemas['JointMetric'][]): StoredJointMetric[] =>
    list.map(({ joint, rmse, unit }) => ({ joint, rmse, unit }))
  return {
    error: metrics.error,
    perJoint: jointMetrics(metrics.per_joint),
    recordings: metrics.recordings.map(({ name, error, per_joint }) => ({ name, error, perJoint: jointMetrics(per_joint) })),
  }
}

function metricsToWire(metrics: StoredMetrics | null): Schemas['VersionMetrics'] | null {
  if (!metrics) return null
  return {
    error: metrics.error,
    per_joint: metrics.perJoint,
    recordings: metrics.recordings.map(({ name, error, perJoint }) => ({ name, error, per_joint: perJoint })),
  }
}

function recommendedToWire({ scheme, update }: Version['recommended']): Record<string, unknown> {
  return { ...(scheme && { scheme }), ...(update && { update: storedUpdateToWire(scheme ?? 'all', update) }) }
}

export function storedUpdateToWire(scheme: Schemas['Scheme'], update: StoredUpdate): Schemas['Update'] {
  return updateToWire(scheme, { ...update, fade: update.fade ?? 1 })
}

import type { AdaptationInputs, AdaptationSettings, LossVersion, Version } from '../../../shared/dynamics/index.ts'
import type { AdaptationRow } from '../../models/adaptation.ts'

/** What of an arm an adaptation was started with: it decides served bits, so it stays as it was then. */
export interface AdaptedArm {
  readonly name: string
  readonly jointNames: readonly string[]
  readonly fingerprint: string
  readonly units: readonly ('N·m' | 'N')[]
  /** N·m (N) and N·m/s (N/s) per joint. */
  readonly torque: readonly number[]
  readonly torqueRate: readonly number[] | null
}

export interface AdaptationContext {
  readonly tool?: string
  readonly payloadClass?: string
  readonly firmware?: string
  readonly frictionSetting?: string
}

/** The part of an adaptation that never changes. */
export interface AdaptationRecord {
  readonly id: string
  readonly teamId: string
  readonly model: string
  readonly version: number
  readonly loss: 'mse' | { readonly name: string; readonly version: number }
  readonly robot: string
  readonly context: AdaptationContext
  readonly settings: AdaptationSettings
  readonly arm: AdaptedArm
  readonly createdAt: Date
  readonly createdBy: string
}

export function recordOf(row: AdaptationRow): AdaptationRecord {
  return {
    id: row.id,
    teamId: row.teamId,
    model: row.model,
    version: row.version,
    loss: row.loss === null ? 'mse' : { name: row.loss, version: row.lossVersion as number },
    robot: row.robot,
    context: JSON.parse(row.context),
    settings: JSON.parse(row.settings),
    arm: JSON.parse(row.arm),
    createdAt: row.createdAt,
    createdBy: row.createdBy,
  }
}

export function inputsOf({ settings, arm }: AdaptationRecord, version: Version, loss: LossVersion | 'mse'): AdaptationInputs {
  return {
    version,
    loss,
    settings,
    limits: { torque: Float64Array.from(arm.torque), torqueRate: arm.torqueRate && Float64Array.from(arm.torqueRate) },
    jointNames: arm.jointNames,
    units: arm.units,
  }
}

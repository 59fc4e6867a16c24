import { DataTypes } from 'sequelize'
import type { CreationOptional, InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'
import type { ProblemSlug } from '../../shared/contract/problems.ts'
import type { JobParameters, JobWork } from '../jobs/job-kinds.ts'

export type JobState = 'queued' | 'running' | 'done' | 'failed' | 'cancelled'

export interface Job extends Model<InferAttributes<Job>, InferCreationAttributes<Job>> {
  id: string
  teamId: string
  kind: JobParameters['kind']
  state: JobState
  /** 0 to 1 */
  progress: number
  message: string
  /** What was asked for, defaults filled in; names, as in the contract. */
  parameters: JobParameters
  /** The same resolved to ids, so that a later rename or release changes nothing. */
  work: JobWork
  result: { model?: string; loss?: string; version: number } | null
  /** A problem's slug and sentence. */
  problem: { slug: ProblemSlug; detail: string } | null
  /** Rises with every change, so that a reader knows whether he has seen it. */
  changeNumber: CreationOptional<number>
  createdAt: Date
  createdBy: string
  startedAt: CreationOptional<Date | null>
  endedAt: CreationOptional<Date | null>
  cancelBy: CreationOptional<string | null>
  cancelReason: CreationOptional<string | null>
  cancelAt: CreationOptional<Date | null>
  leaseOwner: CreationOptional<string | null>
  leaseUntil: CreationOptional<Date | null>
}

export const defineJob = (sequelize: Sequelize) =>
  sequelize.define<Job>('jobs', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    teamId: { type: DataTypes.CHAR(36), allowNull: false },
    kind: { type: DataTypes.STRING(40), allowNull: false },
    state: { type: DataTypes.ENUM('queued', 'running', 'done', 'failed', 'cancelled'), allowNull: false },
    progress: { type: DataTypes.DOUBLE, allowNull: false },
    message: { type: DataTypes.STRING(300), allowNull: false },
    parameters: { type: DataTypes.JSON, allowNull: false },
    work: { type: DataTypes.JSON, allowNull: false },
    result: { type: DataTypes.JSON },
    problem: { type: DataTypes.JSON },
    changeNumber: { type: DataTypes.INTEGER.UNSIGNED, allowNull: false, defaultValue: 1 },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
    createdBy: { type: DataTypes.STRING(160), allowNull: false },
    startedAt: { type: DataTypes.DATE(3) },
    endedAt: { type: DataTypes.DATE(3) },
    cancelBy: { type: DataTypes.STRING(160) },
    cancelReason: { type: DataTypes.STRING(500) },
    cancelAt: { type: DataTypes.DATE(3) },
    leaseOwner: { type: DataTypes.CHAR(36) },
    leaseUntil: { type: DataTypes.DATE(3) },
  })

import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, Model, NonAttribute, Sequelize } from 'sequelize'
import type { Arm } from './arm.ts'

export type RecordingUse = 'fit' | 'meta_train' | 'validate' | 'evaluate'

export interface RecordingContext {
  robot?: string
  tool?: string
  motion?: string
  payload?: { mass: number; centerOfMass?: number[] }
}

/** A recording's description; its rows are in recording_chunks. */
export interface Recording extends Model<InferAttributes<Recording>, InferCreationAttributes<Recording>> {
  id: string
  teamId: string
  armId: string
  name: string
  use: RecordingUse
  context: RecordingContext
  rowCount: number
  duration: number
  rate: number
  bytes: number
  checksum: string
  createdAt: Date
  createdBy: string
  arm?: NonAttribute<Arm>
}

export const defineRecording = (sequelize: Sequelize) =>
  sequelize.define<Recording>('recordings', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    teamId: { type: DataTypes.CHAR(36), allowNull: false },
    armId: { type: DataTypes.CHAR(36), allowNull: false },
    name: { type: DataTypes.STRING(200), allowNull: false },
    use: { type: DataTypes.ENUM('fit', 'meta_train', 'validate', 'evaluate'), allowNull: false },
    context: { type: DataTypes.JSON, allowNull: false },
    rowCount: { type: DataTypes.INTEGER.UNSIGNED, allowNull: false },
    duration: { type: DataTypes.DOUBLE, allowNull: false },
    rate: { type: DataTypes.DOUBLE, allowNull: false },
    bytes: { type: DataTypes.BIGINT.UNSIGNED, allowNull: false },
    checksum: { type: DataTypes.CHAR(64), allowNull: false },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
    createdBy: { type: DataTypes.STRING(160), allowNull: false },
  })

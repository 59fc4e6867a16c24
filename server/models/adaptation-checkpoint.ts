import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'

export interface AdaptationCheckpointRow extends Model<InferAttributes<AdaptationCheckpointRow>, InferCreationAttributes<AdaptationCheckpointRow>> {
  adaptationId: string
  /** The state after the log's entry of this position. */
  position: number
  bytes: Buffer
}

export const defineAdaptationCheckpoint = (sequelize: Sequelize) =>
  sequelize.define<AdaptationCheckpointRow>('adaptation_checkpoints', {
    adaptationId: { type: DataTypes.CHAR(36), primaryKey: true },
    position: { type: DataTypes.BIGINT.UNSIGNED, primaryKey: true },
    bytes: { type: DataTypes.BLOB('long'), allowNull: false },
  })

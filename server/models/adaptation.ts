import { DataTypes } from 'sequelize'
import type { CreationOptional, InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'

export interface AdaptationRow extends Model<InferAttributes<AdaptationRow>, InferCreationAttributes<AdaptationRow>> {
  id: string
  teamId: string
  model: string
  version: number
  /** null: mse. */
  loss: string | null
  lossVersion: number | null
  robot: string
  /** JSON texts: they decide served bits and must come back as they went in. */
  context: string
  settings: string
  arm: string
  state: 'adapting' | 'frozen' | 'ended'
  frozenReason: CreationOptional<string | null>
  frozenAt: CreationOptional<Date | null>
  frozenBy: CreationOptional<string | null>
  createdAt: Date
  createdBy: string
  endedAt: CreationOptional<Date | null>
  leaseHolder: CreationOptional<string | null>
  leaseEpoch: CreationOptional<number>
}

export const defineAdaptation = (sequelize: Sequelize) =>
  sequelize.define<AdaptationRow>('adaptations', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    teamId: { type: DataTypes.CHAR(36), allowNull: false },
    model: { type: DataTypes.STRING(64), allowNull: false },
    version: { type: DataTypes.INTEGER.UNSIGNED, allowNull: false },
    loss: { type: DataTypes.STRING(64) },
    lossVersion: { type: DataTypes.INTEGER.UNSIGNED },
    robot: { type: DataTypes.STRING(120), allowNull: false },
    context: { type: DataTypes.TEXT, allowNull: false },
    settings: { type: DataTypes.TEXT, allowNull: false },
    arm: { type: DataTypes.TEXT, allowNull: false },
    state: { type: DataTypes.ENUM('adapting', 'frozen', 'ended'), allowNull: false },
    frozenReason: { type: DataTypes.STRING(1000) },
    frozenAt: { type: DataTypes.DATE(3) },
    frozenBy: { type: DataTypes.STRING(160) },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
    createdBy: { type: DataTypes.STRING(160), allowNull: false },
    endedAt: { type: DataTypes.DATE(3) },
    leaseHolder: { type: DataTypes.CHAR(36) },
    leaseEpoch: { type: DataTypes.BIGINT.UNSIGNED, allowNull: false, defaultValue: 0 },
  })

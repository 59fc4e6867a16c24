import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'

/** Never changed or deleted. */
export interface Release extends Model<InferAttributes<Release>, InferCreationAttributes<Release>> {
  id: string
  teamId: string
  modelId: string
  number: number
  kind: 'release' | 'rollback'
  version: number
  previousVersion: number | null
  reason: string
  createdAt: Date
  createdBy: string
}

export const defineRelease = (sequelize: Sequelize) =>
  sequelize.define<Release>('releases', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    teamId: { type: DataTypes.CHAR(36), allowNull: false },
    modelId: { type: DataTypes.CHAR(36), allowNull: false },
    number: { type: DataTypes.INTEGER.UNSIGNED, allowNull: false },
    kind: { type: DataTypes.ENUM('release', 'rollback'), allowNull: false },
    version: { type: DataTypes.INTEGER.UNSIGNED, allowNull: false },
    previousVersion: { type: DataTypes.INTEGER.UNSIGNED },
    reason: { type: DataTypes.STRING(500), allowNull: false },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
    createdBy: { type: DataTypes.STRING(160), allowNull: false },
  })

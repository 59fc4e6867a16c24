import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, CreationOptional, Model, Sequelize } from 'sequelize'

export interface ApiKey extends Model<InferAttributes<ApiKey>, InferCreationAttributes<ApiKey>> {
  id: string
  teamId: string
  name: string
  /** Separated by spaces, as in RFC 6750. */
  scopes: string
  secretHash: string
  hint: string
  formerHash: CreationOptional<string | null>
  overlapUntil: CreationOptional<Date | null>
  createdAt: Date
  createdBy: string
  expiresAt: Date
  lastUsedAt: CreationOptional<Date | null>
  revokedAt: CreationOptional<Date | null>
}

export const defineApiKey = (sequelize: Sequelize) =>
  sequelize.define<ApiKey>('api_keys', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    teamId: { type: DataTypes.CHAR(36), allowNull: false },
    name: { type: DataTypes.STRING(120), allowNull: false },
    scopes: { type: DataTypes.STRING(100), allowNull: false },
    secretHash: { type: DataTypes.CHAR(64), allowNull: false },
    hint: { type: DataTypes.CHAR(4), allowNull: false },
    formerHash: { type: DataTypes.CHAR(64) },
    overlapUntil: { type: DataTypes.DATE(3) },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
    createdBy: { type: DataTypes.STRING(160), allowNull: false },
    expiresAt: { type: DataTypes.DATE(3), allowNull: false },
    lastUsedAt: { type: DataTypes.DATE(3) },
    revokedAt: { type: DataTypes.DATE(3) },
  })

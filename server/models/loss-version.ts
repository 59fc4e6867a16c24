import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'
import type { StoredUpdate } from './version.ts'

/** Next-batch error on the validation recordings. */
export interface StoredComparison {
  name: string
  error: number
  rate?: number
}

/** Never changed or deleted. */
export interface LossVersion extends Model<InferAttributes<LossVersion>, InferCreationAttributes<LossVersion>> {
  id: string
  teamId: string
  lossId: string
  number: number
  baseVersionId: string
  baseVersion: number
  baseChecksum: string
  scheme: 'all' | 'last_layer' | 'bias'
  updateSettings: StoredUpdate
  /** encodeLossVersion() of shared/dynamics; left out of lists. */
  artefact: Buffer
  checksum: string
  origin: { kind: 'meta_trained' | 'imported'; job?: string }
  validation: StoredComparison[]
  createdAt: Date
  createdBy: string
}

export const defineLossVersion = (sequelize: Sequelize) =>
  sequelize.define<LossVersion>(
    'loss_versions',
    {
      id: { type: DataTypes.CHAR(36), primaryKey: true },
      teamId: { type: DataTypes.CHAR(36), allowNull: false },
      lossId: { type: DataTypes.CHAR(36), allowNull: false },
      number: { type: DataTypes.INTEGER.UNSIGNED, allowNull: false },
      baseVersionId: { type: DataTypes.CHAR(36), allowNull: false },
      baseVersion: { type: DataTypes.INTEGER.UNSIGNED, allowNull: false },
      baseChecksum: { type: DataTypes.CHAR(64), allowNull: false },
      scheme: { type: DataTypes.STRING(40), allowNull: false },
      updateSettings: { type: DataTypes.JSON, allowNull: false },
      artefact: { type: DataTypes.BLOB('medium'), allowNull: false },
      checksum: { type: DataTypes.CHAR(64), allowNull: false },
      origin: { type: DataTypes.JSON, allowNull: false },
      validation: { type: DataTypes.JSON, allowNull: false },
      createdAt: { type: DataTypes.DATE(3), allowNull: false },
      createdBy: { type: DataTypes.STRING(160), allowNull: false },
    },
    { defaultScope: { attributes: { exclude: ['artefact'] } }, scopes: { withArtefact: {} } },
  )

import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'

export interface VersionOrigin {
  kind: 'fitted' | 'imported' | 'promoted'
  job?: string
  adaptation?: string
  revision?: number
  parentVersion?: number
  recordings?: { name: string; checksum: string }[]
  reason?: string
}

export interface StoredJointMetric {
  joint: string
  rmse: number
  unit: 'N·m' | 'N'
}

export interface StoredMetrics {
  error: number
  perJoint: StoredJointMetric[]
  recordings: { name: string; error: number; perJoint: StoredJointMetric[] }[]
}

/** What an adaptation under `mse` takes where it names nothing. */
export interface StoredUpdate {
  kind: 'sgd' | 'adam'
  rate: number
  rowsPerStep: number
  fade?: number
}

/** Never changed or deleted. */
export interface Version extends Model<InferAttributes<Version>, InferCreationAttributes<Version>> {
  id: string
  teamId: string
  modelId: string
  number: number
  origin: VersionOrigin
  network: { sizes: number[]; activation: 'relu' | 'tanh' }
  /** encodeVersion() of shared/dynamics; left out of lists. */
  artefact: Buffer
  checksum: string
  metrics: StoredMetrics | null
  recommended: { scheme?: 'all' | 'last_layer' | 'bias'; update?: StoredUpdate }
  createdAt: Date
  createdBy: string
}

export const defineVersion = (sequelize: Sequelize) =>
  sequelize.define<Version>(
    'versions',
    {
      id: { type: DataTypes.CHAR(36), primaryKey: true },
      teamId: { type: DataTypes.CHAR(36), allowNull: false },
      modelId: { type: DataTypes.CHAR(36), allowNull: false },
      number: { type: DataTypes.INTEGER.UNSIGNED, allowNull: false },
      origin: { type: DataTypes.JSON, allowNull: false },
      network: { type: DataTypes.JSON, allowNull: false },
      artefact: { type: DataTypes.BLOB('medium'), allowNull: false },
      checksum: { type: DataTypes.CHAR(64), allowNull: false },
      metrics: { type: DataTypes.JSON },
      recommended: { type: DataTypes.JSON, allowNull: false },
      createdAt: { type: DataTypes.DATE(3), allowNull: false },
      createdBy: { type: DataTypes.STRING(160), allowNull: false },
    },
    { defaultScope: { attributes: { exclude: ['artefact'] } }, scopes: { withArtefact: {} } },
  )

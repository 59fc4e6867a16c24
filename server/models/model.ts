import { DataTypes } from 'sequelize'
import type {
  CreationOptional,
  InferAttributes,
  InferCreationAttributes,
  Model as SequelizeModel,
  NonAttribute,
  Sequelize,
} from 'sequelize'
import type { Arm } from './arm.ts'

/** A model of an arm. What is live, and how often that changed, is repeated here from releases, under the row's lock. */
export interface Model extends SequelizeModel<InferAttributes<Model>, InferCreationAttributes<Model>> {
  id: string
  teamId: string
  armId: string
  name: string
  description: string
  liveVersion: CreationOptional<number | null>
  liveSince: CreationOptional<Date | null>
  releaseCount: CreationOptional<number>
  newestVersion: CreationOptional<number | null>
  archivedAt: CreationOptional<Date | null>
  createdAt: Date
  createdBy: string
  arm?: NonAttribute<Arm>
}

export const defineModel = (sequelize: Sequelize) =>
  sequelize.define<Model>('models', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    teamId: { type: DataTypes.CHAR(36), allowNull: false },
    armId: { type: DataTypes.CHAR(36), allowNull: false },
    name: { type: DataTypes.STRING(64), allowNull: false },
    description: { type: DataTypes.STRING(2000), allowNull: false },
    liveVersion: { type: DataTypes.INTEGER.UNSIGNED },
    liveSince: { type: DataTypes.DATE(3) },
    releaseCount: { type: DataTypes.INTEGER.UNSIGNED, allowNull: false, defaultValue: 0 },
    newestVersion: { type: DataTypes.INTEGER.UNSIGNED },
    archivedAt: { type: DataTypes.DATE(3) },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
    createdBy: { type: DataTypes.STRING(160), allowNull: false },
  })

import { DataTypes } from 'sequelize'
import type {
  CreationOptional,
  InferAttributes,
  InferCreationAttributes,
  Model as SequelizeModel,
  NonAttribute,
  Sequelize,
} from 'sequelize'
import type { LearnedLossKind } from '../../shared/dynamics/loss-version.ts'
import type { Model } from './model.ts'

export interface Loss extends SequelizeModel<InferAttributes<Loss>, InferCreationAttributes<Loss>> {
  id: string
  teamId: string
  modelId: string
  name: string
  kind: LearnedLossKind
  description: string
  newestVersion: CreationOptional<number | null>
  createdAt: Date
  createdBy: string
  model?: NonAttribute<Model>
}

export const defineLoss = (sequelize: Sequelize) =>
  sequelize.define<Loss>('losses', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    teamId: { type: DataTypes.CHAR(36), allowNull: false },
    modelId: { type: DataTypes.CHAR(36), allowNull: false },
    name: { type: DataTypes.STRING(64), allowNull: false },
    kind: { type: DataTypes.STRING(40), allowNull: false },
    description: { type: DataTypes.STRING(2000), allowNull: false },
    newestVersion: { type: DataTypes.INTEGER.UNSIGNED },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
    createdBy: { type: DataTypes.STRING(160), allowNull: false },
  })

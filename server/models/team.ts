import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, CreationOptional, Model, Sequelize } from 'sequelize'

export interface Team extends Model<InferAttributes<Team>, InferCreationAttributes<Team>> {
  id: string
  name: string
  simulated: CreationOptional<boolean>
  createdAt: Date
}

export const defineTeam = (sequelize: Sequelize) =>
  sequelize.define<Team>('teams', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    name: { type: DataTypes.STRING(120), allowNull: false },
    simulated: { type: DataTypes.BOOLEAN, allowNull: false, defaultValue: false },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
  })

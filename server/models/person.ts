import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'

export interface Person extends Model<InferAttributes<Person>, InferCreationAttributes<Person>> {
  id: string
  email: string
  name: string
  passwordHash: string
  passwordChangedAt: Date
  createdAt: Date
}

export const definePerson = (sequelize: Sequelize) =>
  sequelize.define<Person>('people', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    email: { type: DataTypes.STRING(254), allowNull: false },
    name: { type: DataTypes.STRING(120), allowNull: false },
    passwordHash: { type: DataTypes.STRING(100), allowNull: false },
    passwordChangedAt: { type: DataTypes.DATE(3), allowNull: false },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
  })

import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'

/** A console session. Only the hash of its id is kept: who reads the database cannot use the sessions in it. */
export interface Session extends Model<InferAttributes<Session>, InferCreationAttributes<Session>> {
  idHash: string
  personId: string | null
  data: string
  createdAt: Date
  seenAt: Date
}

export const defineSession = (sequelize: Sequelize) =>
  sequelize.define<Session>('sessions', {
    idHash: { type: DataTypes.CHAR(64), primaryKey: true },
    personId: { type: DataTypes.CHAR(36) },
    data: { type: DataTypes.TEXT, allowNull: false },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
    seenAt: { type: DataTypes.DATE(3), allowNull: false },
  })

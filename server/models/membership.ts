import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, Model, NonAttribute, Sequelize } from 'sequelize'
import type { Role } from '../services/permissions.ts'
import type { Person } from './person.ts'
import type { Team } from './team.ts'

export interface Membership extends Model<InferAttributes<Membership>, InferCreationAttributes<Membership>> {
  teamId: string
  personId: string
  role: Role
  roleSince: Date
  team?: NonAttribute<Team>
  person?: NonAttribute<Person>
}

export const defineMembership = (sequelize: Sequelize) =>
  sequelize.define<Membership>('memberships', {
    teamId: { type: DataTypes.CHAR(36), primaryKey: true },
    personId: { type: DataTypes.CHAR(36), primaryKey: true },
    role: { type: DataTypes.ENUM('engineer', 'operator', 'reviewer', 'administrator'), allowNull: false },
    roleSince: { type: DataTypes.DATE(3), allowNull: false },
  })

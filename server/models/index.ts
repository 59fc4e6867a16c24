import type { Sequelize } from 'sequelize'
import { defineApiKey } from './api-key.ts'
import { defineAuditEvent } from './audit-event.ts'
import { defineMembership } from './membership.ts'
import { definePerson } from './person.ts'
import { defineSession } from './session.ts'
import { defineTeam } from './team.ts'

/** Every model of one connection, associations set. Add yours here: one line each. */
export function defineModels(sequelize: Sequelize) {
  const models = {
    Team: defineTeam(sequelize),
    Person: definePerson(sequelize),
    Membership: defineMembership(sequelize),
    Session: defineSession(sequelize),
    ApiKey: defineApiKey(sequelize),
    AuditEvent: defineAuditEvent(sequelize),
  }
  models.Membership.belongsTo(models.Team, { foreignKey: 'teamId', as: 'team' })
  models.Membership.belongsTo(models.Person, { foreignKey: 'personId', as: 'person' })
  return models
}

export type Models = ReturnType<typeof defineModels>

import type { Sequelize } from 'sequelize'
import { defineAdaptation } from './adaptation.ts'
import { defineAdaptationCheckpoint } from './adaptation-checkpoint.ts'
import { defineAdaptationLog } from './adaptation-log.ts'
import { defineApiKey } from './api-key.ts'
import { defineArm } from './arm.ts'
import { defineAuditEvent } from './audit-event.ts'
import { defineJob } from './job.ts'
import { defineLoss } from './loss.ts'
import { defineLossVersion } from './loss-version.ts'
import { defineMembership } from './membership.ts'
import { defineModel } from './model.ts'
import { definePerson } from './person.ts'
import { defineRecording } from './recording.ts'
import { defineRelease } from './release.ts'
import { defineSession } from './session.ts'
import { defineTeam } from './team.ts'
import { defineVersion } from './version.ts'

/** Every model of one connection, associations set. Add yours here: one line each. */
export function defineModels(sequelize: Sequelize) {
  const models = {
    Team: defineTeam(sequelize),
    Person: definePerson(sequelize),
    Membership: defineMembership(sequelize),
    Session: defineSession(sequelize),
    ApiKey: defineApiKey(sequelize),
    AuditEvent: defineAuditEvent(sequelize),
    Adaptation: defineAdaptation(sequelize),
    AdaptationLog: defineAdaptationLog(sequelize),
    AdaptationCheckpoint: defineAdaptationCheckpoint(sequelize),
    Arm: defineArm(sequelize),
    Recording: defineRecording(sequelize),
    Model: defineModel(sequelize),
    Version: defineVersion(sequelize),
    Release: defineRelease(sequelize),
    Loss: defineLoss(sequelize),
    LossVersion: defineLossVersion(sequelize),
    Job: defineJob(sequelize),
  }
  models.Membership.belongsTo(models.Team, { foreignKey: 'teamId', as: 'team' })
  models.Membership.belongsTo(models.Person, { foreignKey: 'personId', as: 'person' })
  models.Recording.belongsTo(models.Arm, { foreignKey: 'armId', as: 'arm' })
  models.Model.belongsTo(models.Arm, { foreignKey: 'armId', as: 'arm' })
  models.Loss.belongsTo(models.Model, { foreignKey: 'modelId', as: 'model' })
  return models
}

export type Models = ReturnType<typeof defineModels>

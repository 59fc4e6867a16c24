import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'

/** Append-only: nothing in the code updates or deletes a row. */
export interface AuditEvent extends Model<InferAttributes<AuditEvent>, InferCreationAttributes<AuditEvent>> {
  id: string
  teamId: string | null
  at: Date
  actorKind: 'person' | 'key' | 'system'
  actorId: string | null
  actorName: string
  action: string
  subjectKind: string
  subjectId: string
  subjectName: string
  stateBefore: unknown
  stateAfter: unknown
  reason: string | null
  requestId: string | null
}

export const defineAuditEvent = (sequelize: Sequelize) =>
  sequelize.define<AuditEvent>('audit_events', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    teamId: { type: DataTypes.CHAR(36) },
    at: { type: DataTypes.DATE(3), allowNull: false },
    actorKind: { type: DataTypes.ENUM('person', 'key', 'system'), allowNull: false },
    actorId: { type: DataTypes.CHAR(36) },
    actorName: { type: DataTypes.STRING(160), allowNull: false },
    action: { type: DataTypes.STRING(60), allowNull: false },
    subjectKind: { type: DataTypes.STRING(40), allowNull: false },
    subjectId: { type: DataTypes.STRING(64), allowNull: false },
    subjectName: { type: DataTypes.STRING(200), allowNull: false },
    stateBefore: { type: DataTypes.JSON },
    stateAfter: { type: DataTypes.JSON },
    reason: { type: DataTypes.STRING(500) },
    requestId: { type: DataTypes.STRING(64) },
  })

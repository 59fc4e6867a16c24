import { DataTypes } from 'sequelize'
import type { InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'

export interface AdaptationLogRow extends Model<InferAttributes<AdaptationLogRow>, InferCreationAttributes<AdaptationLogRow>> {
  adaptationId: string
  /** From 1, without gaps: the order in which the entries made the state. */
  position: number
  entry: 'batch' | 'event' | 'command'
  sequence: number | null
  revision: number
  verdict: 'accepted' | 'rejected' | 'stored' | null
  at: Date
  /** JSON: what the entry says, without its matrices. */
  detail: string
  /** A batch's time, position, velocity, acceleration and torque as binary64. */
  content: Buffer | null
  /** JSON: what was answered, joints in the arm's order. */
  answer: string
  nextSequence: number
  asOf: number | null
  rejections: number
}

export const defineAdaptationLog = (sequelize: Sequelize) =>
  sequelize.define<AdaptationLogRow>('adaptation_log', {
    adaptationId: { type: DataTypes.CHAR(36), primaryKey: true },
    position: { type: DataTypes.BIGINT.UNSIGNED, primaryKey: true },
    entry: { type: DataTypes.ENUM('batch', 'event', 'command'), allowNull: false },
    sequence: { type: DataTypes.BIGINT.UNSIGNED },
    revision: { type: DataTypes.BIGINT.UNSIGNED, allowNull: false },
    verdict: { type: DataTypes.ENUM('accepted', 'rejected', 'stored') },
    at: { type: DataTypes.DATE(3), allowNull: false },
    detail: { type: DataTypes.TEXT, allowNull: false },
    content: { type: DataTypes.BLOB('medium') },
    answer: { type: DataTypes.TEXT('medium'), allowNull: false },
    nextSequence: { type: DataTypes.BIGINT.UNSIGNED, allowNull: false },
    asOf: { type: DataTypes.DOUBLE },
    rejections: { type: DataTypes.INTEGER.UNSIGNED, allowNull: false },
  })

import { DataTypes } from 'sequelize'
import type { CreationOptional, InferAttributes, InferCreationAttributes, Model, Sequelize } from 'sequelize'

/** As stored: camelCase, SI units. */
export interface StoredJoint {
  name: string
  type: 'revolute' | 'continuous' | 'prismatic'
  positionLower?: number
  positionUpper?: number
  velocityLimit: number
  torqueLimit: number
  torqueRateLimit?: number
}

export type ControllerTerm = 'gravity' | 'coriolis' | 'inertia' | 'friction'

export interface StoredTorque {
  side: 'link' | 'motor'
  positiveAccelerates: boolean
  controllerAdds: ControllerTerm[]
}

export type Fallback = 'gravity_only' | 'hold_position' | 'controlled_stop' | 'zero_torque'

export interface Arm extends Model<InferAttributes<Arm>, InferCreationAttributes<Arm>> {
  id: string
  teamId: string
  name: string
  description: string
  joints: StoredJoint[]
  jointsFingerprint: string
  gravity: number[]
  torque: StoredTorque
  fallback: Fallback
  horizon: number
  firmware: string | null
  archivedAt: CreationOptional<Date | null>
  createdAt: Date
  createdBy: string
}

export const defineArm = (sequelize: Sequelize) =>
  sequelize.define<Arm>('arms', {
    id: { type: DataTypes.CHAR(36), primaryKey: true },
    teamId: { type: DataTypes.CHAR(36), allowNull: false },
    name: { type: DataTypes.STRING(64), allowNull: false },
    description: { type: DataTypes.STRING(2000), allowNull: false },
    joints: { type: DataTypes.JSON, allowNull: false },
    jointsFingerprint: { type: DataTypes.CHAR(12), allowNull: false },
    gravity: { type: DataTypes.JSON, allowNull: false },
    torque: { type: DataTypes.JSON, allowNull: false },
    fallback: { type: DataTypes.STRING(40), allowNull: false },
    horizon: { type: DataTypes.DOUBLE, allowNull: false },
    firmware: { type: DataTypes.STRING(120) },
    archivedAt: { type: DataTypes.DATE(3) },
    createdAt: { type: DataTypes.DATE(3), allowNull: false },
    createdBy: { type: DataTypes.STRING(160), allowNull: false },
  })

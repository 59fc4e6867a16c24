import { Op } from 'sequelize'
import type { Transaction } from 'sequelize'
import { Refusal, type Fault } from '../../shared/contract/problems.ts'
import { duplicateKey, type Database } from '../database/connection.ts'
import { uuid7 } from '../database/uuid7.ts'
import type { Dependencies } from '../dependencies.ts'
import type { Arm, Fallback, StoredJoint, StoredTorque } from '../models/arm.ts'
import { decodeCursor, pageOf, type Page, type PageRequest } from './page.ts'
import { jointsFingerprint } from './joints-fingerprint.ts'
import { callerLabel, requireAction, type Caller } from './permissions.ts'

export interface NewArm {
  readonly name: string
  readonly description?: string
  readonly joints: StoredJoint[]
  readonly gravity: number[]
  readonly torque: StoredTorque
  readonly fallback: Fallback
  readonly horizon?: number
  readonly firmware?: string
}

export interface ArmRecord {
  readonly id: string
  readonly name: string
  readonly description: string
  readonly joints: readonly StoredJoint[]
  readonly jointsFingerprint: string
  readonly gravity: readonly number[]
  readonly torque: StoredTorque
  readonly fallback: Fallback
  readonly horizon: number
  readonly firmware: string | null
  readonly archivedAt: Date | null
  readonly createdAt: Date
  readonly createdBy: string
}

export interface ArmService {
  create(caller: Caller, given: NewArm, requestId?: string): Promise<ArmRecord>
  get(caller: Caller, name: string): Promise<ArmRecord>
  list(caller: Caller, page: PageRequest & { archived?: boolean }): Promise<Page<ArmRecord>>
  archive(caller: Caller, name: string, reason: string, requestId?: string): Promise<ArmRecord>
}

export function createArmService({ database, clock, audit, changeFeed }: Dependencies): ArmService {
  const { Arm } = database.models

  return {
    async create(caller, given, requestId) {
      requireAction(caller, 'build')
      checkArm(given)
      try {
        return await database.transaction(async (transaction) => {
          const arm = await Arm.create(
            {
              id: uuid7(),
              teamId: caller.teamId,
              name: given.name,
              description: given.description ?? '',
              joints: given.joints,
              jointsFingerprint: jointsFingerprint(given.joints.map(({ name }) => name)),
              gravity: given.gravity,
              torque: given.torque,
              fallback: given.fallback,
              horizon: given.horizon ?? 1,
              firmware: given.firmware ?? null,
              createdAt: clock.now(),
              createdBy: callerLabel(caller),
            },
            { transaction },
          )
          const record = recordOf(arm)
          await audit.record(transaction, {
            by: caller,
            action: 'arm.create',
            subject: { kind: 'arm', id: arm.id, name: arm.name },
            after: record,
            requestId,
          })
          return record
        })
      } catch (error) {
        if (duplicateKey(error) !== 'arms_name') throw error
        throw new Refusal(
          'name-taken',
          `There is an arm called "${given.name}" already. Choose another name; archived arms keep theirs.`,
          { cause: error },
        )
      }
    },

    async get(caller, name) {
      requireAction(caller, 'read_arms')
      return recordOf(await findArm(database, caller.teamId, name))
    },

    async list(caller, { cursor, limit, archived = false }) {
      requireAction(caller, 'read_arms')
      const rows = await Arm.findAll({
        where: {
          teamId: caller.teamId,
          ...(!archived && { archivedAt: null }),
          ...(cursor !== undefined && { name: { [Op.gt]: decodeCursor(cursor, 'text') } }),
        },
        order: [['name', 'ASC']],
        limit: limit + 1,
      })
      return pageOf(rows, limit, ({ name }) => [name], recordOf)
    },

    async archive(caller, name, reason, requestId) {
      requireAction(caller, 'build')
      return database.transaction(async (transaction) => {
        const arm = await findArm(database, caller.teamId, name, transaction)
        if (arm.archivedAt) return recordOf(arm)
        await arm.update({ archivedAt: clock.now() }, { transaction })
        await audit.record(transaction, {
          by: caller,
          action: 'arm.archive',
          subject: { kind: 'arm', id: arm.id, name: arm.name },
          reason,
          requestId,
        })
        await changeFeed.announce(transaction, { kind: 'archive', teamId: caller.teamId, subject: arm.id })
        return recordOf(arm)
      })
    },
  }
}

/** The team's arm, locked when a transaction is given. @throws {Refusal} not-found */
export async function findArm(database: Database, teamId: string, name: string, transaction?: Transaction): Promise<Arm> {
  const arm = await database.models.Arm.findOne({
    where: { teamId, name },
    ...(transaction && { transaction, lock: transaction.LOCK.UPDATE }),
  })
  if (!arm) throw new Refusal('not-found', `There is no arm called "${name}" in your team. GET /v1/arms lists them.`)
  return arm
}

/** @throws {Refusal} archived */
export function requireArmInUse(arm: Arm): void {
  if (arm.archivedAt)
    throw new Refusal('archived', `Arm "${arm.name}" has been archived; nothing new is built on it. Describe a new arm.`)
}

function recordOf(arm: Arm): ArmRecord {
  const { id, name, description, joints, gravity, torque, fallback, horizon, firmware, archivedAt, createdAt, createdBy } = arm
  return {
    id,
    name,
    description,
    joints,
    jointsFingerprint: arm.jointsFingerprint,
    gravity,
    torque,
    fallback,
    horizon,
    firmware,
    archivedAt: archivedAt ?? null,
    createdAt,
    createdBy,
  }
}

/** m/s². Jupiter has 25. */
const MOST_GRAVITY = 30

/** What the contract's schema cannot say of an arm. @throws {Refusal} invalid-request, rigid-body-required */
export function checkArm({ joints, gravity, torque }: Pick<NewArm, 'joints' | 'gravity' | 'torque'>): void {
  const faults: Fault[] = []
  const fault = (pointer: string, detail: string) => faults.push({ pointer, detail })
  const first = new Map<string, number>()
  joints.forEach((joint, index) => {
    const at = `/joints/${index}`
    if (joint.name !== joint.name.trim() || /[\n\r]/.test(joint.name)) {
      fault(`${at}/name`, `Joint ${index} is called ${JSON.stringify(joint.name)}: leave out line ends and blanks at the ends.`)
    }
    const earlier = first.get(joint.name)
    if (earlier !== undefined)
      fault(`${at}/name`, `Joints ${earlier} and ${index} are both called "${joint.name}". Give every joint its own name.`)
    else first.set(joint.name, index)
    checkPositionLimits(joint, at, fault)
  })
  const size = Math.hypot(...gravity)
  if (size > MOST_GRAVITY)
    fault(
      '/gravity',
      `Gravity has ${size.toPrecision(4)} m/s², expected at most ${MOST_GRAVITY}: (0, 0, -9.81) for an arm on the floor.`,
    )
  if (faults.length > 0) {
    const more = faults.length > 1 ? ` And ${faults.length - 1} more; each is in "errors".` : ''
    throw new Refusal('invalid-request', faults[0].detail + more, { errors: faults })
  }
  if (torque.controllerAdds.length > 0) {
    throw new Refusal(
      'rigid-body-required',
      `controller_adds names ${torque.controllerAdds.join(', ')}: ` +
      `taking these out of a predicted torque needs the arm's rigid-body description, ` +
        'which an arm cannot have yet. Send [] and have the controller add nothing to the torque it gets.',
      { errors: [{ pointer: '/torque/controller_adds', detail: 'Must be empty.' }] },
    )
  }
}

function checkPositionLimits(joint: StoredJoint, at: string, fault: (pointer: string, detail: string) => void): void {
  const { name, type, positionLower: lower, positionUpper: upper } = joint
  if ((lower === undefined) !== (upper === undefined)) {
    const [there, missing] = lower === undefined ? ['position_upper', 'position_lower'] : ['position_lower', 'position_upper']
    fault(`${at}/${missing}`, `Joint "${name}" has ${there} but no ${missing}. Give both, or neither.`)
  }
  if (lower === undefined || upper === undefined) return
  if (type === 'continuous')
    fault(
      `${at}/position_lower`,
      `Joint "${name}" is continuous and so has no position limits. Leave them out, or call it revolute.`,
    )
  else if (!(lower < upper))
    fault(
      `${at}/position_lower`,
      `Joint "${name}" has position limits from ${lower} to ${upper}: the lower must be less than the upper.`,
    )
}

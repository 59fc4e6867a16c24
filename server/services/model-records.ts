import type { Transaction } from 'sequelize'
import { Refusal } from '../../shared/contract/problems.ts'
import type { Database } from '../database/connection.ts'
import type { Arm } from '../models/arm.ts'
import type { Model } from '../models/model.ts'

export type ModelWithArm = Model & { arm: Arm }

/** The team's model with its arm, its row locked when a transaction is given. @throws {Refusal} not-found */
export async function findModel(
  database: Database,
  teamId: string,
  name: string,
  transaction?: Transaction,
): Promise<ModelWithArm> {
  const model = await database.models.Model.findOne({
    where: { teamId, name },
    include: [{ model: database.models.Arm, as: 'arm', required: true }],
    ...(transaction && { transaction, lock: { level: transaction.LOCK.UPDATE, of: database.models.Model } }),
  })
  if (!model) throw new Refusal('not-found', `There is no model called "${name}" in your team. GET /v1/models lists them.`)
  return model as ModelWithArm
}

/** @throws {Refusal} archived */
export function requireModelInUse(model: Model): void {
  if (model.archivedAt)
    throw new Refusal(
      'archived',
      `Model "${model.name}" has been archived: it still predicts, nothing new is made of it. Start another model.`,
    )
}

import { createPrediction } from '../../../shared/dynamics/index.ts'
import type { Adaptation, BatchEntry, Kernels } from '../../../shared/dynamics/index.ts'
import { Refusal } from '../../../shared/contract/problems.ts'
import type { Database } from '../../database/connection.ts'
import type { Directory } from './directory.ts'
import { entryOf } from './log-row.ts'
import { recordOf } from './record.ts'
import type { AdaptationRecord } from './record.ts'
import { rebuild, replay } from './recovery.ts'

/** The rows of one stored batch, joints in the arm's order. */
export interface BatchRows {
  readonly record: AdaptationRecord
  readonly position: number
  readonly batch: BatchEntry
  /** By the state that was served before the batch; rows × n, N·m (N), clamped. */
  readonly predicted: Float64Array
}

/** States that were rebuilt for looking at rows: whoever looks at one batch looks at the next one soon. */
const mostShadows = 4
const idleMs = 60_000

interface Shadow {
  machine: Adaptation
  position: number
  usedAt: number
}

/**
 * What a state of the past predicted. It is not stored: the log says it, by replaying from the checkpoint before. A machine that
 * was brought to one position is kept for a while and led on from there.
 */
export function createBatchRows({ database, kernels, directory }: { database: Database; kernels: Kernels; directory: Directory }) {
  const shadows = new Map<string, Shadow>()

  function release(id: string): void {
    shadows.get(id)?.machine.release()
    shadows.delete(id)
  }

  function tidy(): void {
    const now = performance.now()
    for (const [id, { usedAt }] of shadows) if (now - usedAt > idleMs || shadows.size > mostShadows) release(id)
  }
  const timer = setInterval(tidy, idleMs)
  timer.unref()

  async function standAt(record: AdaptationRecord, position: number): Promise<Adaptation> {
    const known = shadows.get(record.id)
    if (known !== undefined && known.position <= position && position - known.position < 512) {
      shadows.delete(record.id)
      try {
        known.position = await replay(database.pool, known.machine, record.id, known.position, position)
      } catch (error) {
        known.machine.release()
        throw error
      }
      return known.machine
    }
    release(record.id)
    const built = await rebuild({ pool: database.pool, kernels }, record.id, await directory.inputs(record), position)
    return built.machine
  }

  let queue: Promise<unknown> = Promise.resolve()

  async function rowsAt(record: AdaptationRecord, position: number, batch: BatchEntry): Promise<BatchRows> {
    const machine = await standAt(record, position - 1)
    try {
      const n = record.arm.jointNames.length
      const room = createPrediction(batch.rows, n)
      machine.predict({ rows: batch.rows, position: batch.position, velocity: batch.velocity, acceleration: batch.acceleration, time: null }, null, room)
      return { record, position, batch, predicted: room.torque }
    } finally {
      release(record.id)
      shadows.set(record.id, { machine, position: position - 1, usedAt: performance.now() })
      tidy()
    }
  }

  return {
    async get(teamId: string, id: string, position: number): Promise<BatchRows> {
      const row = await database.models.Adaptation.findOne({ where: { id, teamId } })
      if (row === null) throw new Refusal('not-found', 'There is no such adaptation in your team. GET /v1/adaptations lists them.')
      const record = recordOf(row)
      const entry = await database.models.AdaptationLog.findOne({ where: { adaptationId: id, position } })
      if (entry === null) throw new Refusal('not-found', `The log has no entry ${position}. GET /v1/adaptations/${id}/log lists them.`)
      if (entry.entry !== 'batch') throw new Refusal('not-found', `Entry ${position} of the log is a ${entry.entry}; only batches have rows.`)
      const batch = entryOf({ ...entry.get(), sequence: Number(entry.sequence) }, record.arm.jointNames.length) as BatchEntry
      // One after the other: rebuilding is work, and two looks at one adaptation share a machine.
      const answer = queue.then(() => rowsAt(record, position, batch))
      queue = answer.catch(() => undefined)
      return answer
    },
    stop(): void {
      clearInterval(timer)
      for (const id of [...shadows.keys()]) release(id)
    },
  }
}

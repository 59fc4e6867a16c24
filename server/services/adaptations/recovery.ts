import type { Pool } from 'mariadb'
import { createAdaptation, restoreAdaptation } from '../../../shared/dynamics/index.ts'
import type { Adaptation, AdaptationInputs, Kernels } from '../../../shared/dynamics/index.ts'
import { entryOf } from './log-row.ts'

/** Log rows read at a time, and how long replaying may keep the event loop from others. */
const pageRows = 32
const sliceMs = 5

/** The log says something that this program does not compute from it. Serving on would be guessing. */
export class ReplayError extends Error {}

/**
 * The adaptation as its log says it stands after `until`: the newest checkpoint before, and the entries after it.
 *
 * @param until  position in the log; Infinity: its end
 * @returns the machine and the position it stands at
 * @throws {ReplayError} a replayed entry leads elsewhere than it once did
 */
export async function rebuild(
  { pool, kernels }: { pool: Pool; kernels: Kernels }, adaptationId: string, inputs: AdaptationInputs, until = Infinity,
): Promise<{ machine: Adaptation; position: number; checkpointed: number }> {
  const [checkpoint] = await pool.query<{ position: number; bytes: Buffer }[]>(
    'SELECT position, bytes FROM adaptation_checkpoints WHERE adaptation_id = ? AND position <= ? ORDER BY position DESC LIMIT 1',
    [adaptationId, lastPosition(until)],
  )
  const machine = checkpoint === undefined ? createAdaptation(kernels, inputs) : restoreAdaptation(kernels, inputs, checkpoint.bytes)
  const checkpointed = Number(checkpoint?.position ?? 0)
  try {
    const position = await replay(pool, machine, adaptationId, checkpointed, until)
    return { machine, position, checkpointed }
  } catch (error) {
    machine.release()
    throw error
  }
}

/** Lets a machine that stands at `from` live through the entries after it. */
export async function replay(pool: Pool, machine: Adaptation, adaptationId: string, from: number, until = Infinity): Promise<number> {
  let position = from
  let sliceStart = performance.now()
  for (;;) {
    const rows = await pool.query<StoredRow[]>(
      `SELECT position, entry, sequence, revision, detail, content FROM adaptation_log
       WHERE adaptation_id = ? AND position > ? AND position <= ? ORDER BY position LIMIT ${pageRows}`,
      [adaptationId, position, lastPosition(until)],
    )
    for (const row of rows) {
      apply(machine, row, position + 1)
      position++
      if (performance.now() - sliceStart > sliceMs) {
        await new Promise(setImmediate)
        sliceStart = performance.now()
      }
    }
    if (rows.length < pageRows) return position
  }
}

type StoredRow = {
  position: number
  entry: 'batch' | 'event' | 'command'
  sequence: number | null
  revision: number
  detail: string
  content: Buffer | null
}

function apply(machine: Adaptation, row: StoredRow, expected: number): void {
  const where = `Log entry ${row.position}`
  if (Number(row.position) !== expected) throw new ReplayError(`${where} stands where ${expected} was expected.`)
  const entry = entryOf({ ...row, sequence: row.sequence === null ? null : Number(row.sequence) }, machine.inputs.jointNames.length)
  const refusal = machine.check(entry)
  if (refusal) throw new ReplayError(`${where} is refused when replayed: ${refusal.detail}`)
  const { revision } = machine.prepare(entry)
  if (revision !== Number(row.revision)) throw new ReplayError(`${where} led to revision ${row.revision}, replayed to ${revision}.`)
  machine.publish()
}

function lastPosition(until: number): number {
  return Math.min(until, Number.MAX_SAFE_INTEGER)
}

import { Op, QueryTypes, type Transaction } from 'sequelize'
import { Refusal } from '../../../shared/contract/problems.ts'
import type { Motion } from '../../../shared/dynamics/motion.ts'
import { duplicateKey } from '../../database/connection.ts'
import { uuid7 } from '../../database/uuid7.ts'
import type { Dependencies } from '../../dependencies.ts'
import type { Arm } from '../../models/arm.ts'
import type { Recording, RecordingContext, RecordingUse } from '../../models/recording.ts'
import { findArm, requireArmInUse } from '../arms.ts'
import { decodeCursor, pageOf, type Page, type PageRequest } from '../page.ts'
import { callerLabel, requireAction, type Caller } from '../permissions.ts'
import { createCsvReading } from './csv-reading.ts'
import { motionOfChunks } from './stored-rows.ts'

export interface RecordingRecord {
  readonly id: string
  readonly arm: string
  readonly name: string
  readonly use: RecordingUse
  readonly context: RecordingContext
  readonly rows: number
  readonly duration: number
  readonly rate: number
  readonly bytes: number
  readonly checksum: string
  readonly createdAt: Date
  readonly createdBy: string
}

export interface NewRecording {
  readonly arm: string
  readonly use: RecordingUse
  readonly name: string
  readonly context: RecordingContext
}

export interface RecordingService {
  /**
   * Reads and stores a recording as it arrives. `stored` is false when this content was there already.
   *
   * @param source  the file; when it throws, nothing stays behind
   */
  upload(
    caller: Caller,
    given: NewRecording,
    source: AsyncIterable<Uint8Array>,
    requestId?: string,
  ): Promise<{ recording: RecordingRecord; stored: boolean }>
  get(caller: Caller, id: string): Promise<RecordingRecord>
  list(caller: Caller, page: PageRequest & { arm?: string; use?: RecordingUse }): Promise<Page<RecordingRecord>>
  delete(caller: Caller, id: string, reason: string, requestId?: string): Promise<void>
  /** The rows of one of the team's recordings. @throws {Refusal} not-found */
  motion(teamId: string, id: string): Promise<Motion>
  /** Begins to remove, now and then, what uploads left behind whose process has gone. */
  start(): Promise<void>
  stop(): Promise<void>
}

/** Chunks of an upload that has not moved for so long belong to a process that has gone. */
const ABANDONED_MINUTES = 15
const SWEEP_MS = 600_000

type RecordingWithArm = Recording & { arm: Arm }

export function createRecordingService({ database, clock, audit, log }: Dependencies): RecordingService {
  const { Arm, Recording } = database.models
  const csv = createCsvReading()
  let timer: NodeJS.Timeout | undefined

  const include = (arm?: string) => [
    { model: Arm, as: 'arm', required: true, ...(arm !== undefined && { where: { name: arm } }) },
  ]

  async function find(teamId: string, id: string): Promise<RecordingWithArm> {
    const recording = await Recording.findOne({ where: { teamId, id }, include: include() })
    if (!recording) throw new Refusal('not-found', `There is no recording ${id} in your team. GET /v1/recordings lists them.`)
    return recording as RecordingWithArm
  }

  async function sameContent(arm: Arm, checksum: string): Promise<RecordingWithArm | null> {
    return (await Recording.findOne({ where: { armId: arm.id, checksum }, include: include() })) as RecordingWithArm | null
  }

  async function discard(id: string): Promise<void> {
    await database.pool.query('DELETE FROM recording_chunks WHERE recording_id = ?', [id])
    await database.pool.query('DELETE FROM recording_uploads WHERE recording_id = ?', [id])
  }

  /** False when the upload had been given up and its chunks taken away. */
  async function endUpload(id: string, transaction: Transaction): Promise<boolean> {
    const ended = await database.sequelize.query('DELETE FROM recording_uploads WHERE recording_id = ?', {
      replacements: [id],
      transaction,
      type: QueryTypes.BULKDELETE,
    })
    return ended === 1
  }

  async function sweep(): Promise<void> {
    const abandoned = await database.pool.query<{ recording_id: string }[]>(
      `SELECT recording_id FROM recording_uploads WHERE touched_at < UTC_TIMESTAMP(3) - INTERVAL ${ABANDONED_MINUTES} MINUTE`,
    )
    for (const { recording_id: id } of abandoned) await discard(id)
  }

  /** Chunks go in one by one, outside a transaction: a slow upload must not hold a connection for its whole length. */
  function chunkStore(id: string): (chunk: ArrayBuffer) => Promise<void> {
    let position = 0
    return async (chunk) => {
      // Prepared, so that a megabyte goes as it is instead of being escaped on the event loop.
      await database.pool.execute('INSERT INTO recording_chunks (recording_id, position, content) VALUES (?, ?, ?)', [
        id,
        position++,
        Buffer.from(chunk),
      ])
      await database.pool.query('UPDATE recording_uploads SET touched_at = UTC_TIMESTAMP(3) WHERE recording_id = ?', [id])
    }
  }

  return {
    async upload(caller, given, source, requestId) {
      requireAction(caller, 'build')
      const arm = await findArm(database, caller.teamId, given.arm)
      requireArmInUse(arm)
      const id = uuid7()
      await database.pool.query('INSERT INTO recording_uploads (recording_id, touched_at) VALUES (?, UTC_TIMESTAMP(3))', [id])
      let checksum = ''
      try {
        const summary = await csv.read(source, arm.joints, chunkStore(id))
        checksum = summary.checksum
        const { rows, duration, rate, bytes } = summary
        const known = await sameContent(arm, checksum)
        if (known) {
          await discard(id)
          return { recording: recordOf(known), stored: false }
        }
        return await database.transaction(async (transaction) => {
          const recording = await Recording.create(
            {
              id,
              teamId: caller.teamId,
              armId: arm.id,
              name: given.name,
              use: given.use,
              context: given.context,
              rowCount: rows,
              duration,
              rate,
              bytes,
              checksum,
              createdAt: clock.now(),
              createdBy: callerLabel(caller),
            },
            { transaction },
          )
          // The sweep takes abandoned uploads away; this one must still be there to become a recording.
          if (!(await endUpload(id, transaction)))
            throw new Refusal('upload-incomplete', 'The upload took too long and was given up. Send it again.')
          const record = recordOf(Object.assign(recording, { arm }))
          await audit.record(transaction, {
            by: caller,
            action: 'recording.upload',
            subject: { kind: 'recording', id, name: given.name },
            after: record,
            requestId,
          })
          return { recording: record, stored: true }
        })
      } catch (error) {
        await discard(id).catch((cause: unknown) =>
          log.warn({ err: cause }, 'a broken upload could not be cleared yet; the sweep will'),
        )
        const known = duplicateKey(error) === 'recordings_content' ? await sameContent(arm, checksum) : null
        if (known) return { recording: recordOf(known), stored: false }
        throw error
      }
    },

    async get(caller, id) {
      requireAction(caller, 'read')
      return recordOf(await find(caller.teamId, id))
    },

    async list(caller, { cursor, limit, arm, use }) {
      requireAction(caller, 'read')
      const rows = await Recording.findAll({
        where: {
          teamId: caller.teamId,
          ...(use !== undefined && { use }),
          ...(cursor !== undefined && { id: { [Op.lt]: decodeCursor(cursor, 'text') } }),
        },
        include: include(arm),
        order: [['id', 'DESC']],
        limit: limit + 1,
      })
      return pageOf(
        rows,
        limit,
        ({ id }) => [id],
        (row) => recordOf(row as RecordingWithArm),
      )
    },

    async delete(caller, id, reason, requestId) {
      requireAction(caller, 'build')
      await database.transaction(async (transaction) => {
        const recording = await Recording.findOne({
          where: { teamId: caller.teamId, id },
          transaction,
          lock: transaction.LOCK.UPDATE,
        })
        if (!recording) throw new Refusal('not-found', `There is no recording ${id} in your team. GET /v1/recordings lists them.`)
        await database.sequelize.query('DELETE FROM recording_chunks WHERE recording_id = ?', { replacements: [id], transaction })
        await recording.destroy({ transaction })
        await audit.record(transaction, {
          by: caller,
          action: 'recording.delete',
          subject: { kind: 'recording', id, name: recording.name },
          before: { name: recording.name, checksum: recording.checksum },
          reason,
          requestId,
        })
      })
    },

    async motion(teamId, id) {
      const recording = await find(teamId, id)
      const chunks = await database.pool.query<{ content: Buffer }[]>(
        'SELECT content FROM recording_chunks WHERE recording_id = ? ORDER BY position',
        [id],
      )
      const motion = motionOfChunks(
        recording.name,
        recording.arm.joints.length,
        chunks.map(({ content }) => content),
      )
      if (motion.rows !== recording.rowCount)
        throw new RangeError(`Recording ${id} has ${motion.rows} stored rows, expected ${recording.rowCount}.`)
      return motion
    },

    async start() {
      await sweep()
      timer = setInterval(
        () => void sweep().catch((error: unknown) => log.warn({ err: error }, 'abandoned uploads could not be cleared')),
        SWEEP_MS,
      )
      timer.unref()
    },

    async stop() {
      clearInterval(timer)
      await csv.stop()
    },
  }
}

function recordOf(recording: RecordingWithArm): RecordingRecord {
  const { id, name, use, context, rowCount, duration, rate, bytes, checksum, createdAt, createdBy } = recording
  return {
    id,
    arm: recording.arm.name,
    name,
    use,
    context,
    rows: rowCount,
    duration,
    rate,
    bytes: Number(bytes),
    checksum,
    createdAt,
    createdBy,
  }
}

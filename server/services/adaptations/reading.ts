import { Op } from 'sequelize'
import { Refusal } from '../../../shared/contract/problems.ts'
import type { Database } from '../../database/connection.ts'
import type { AdaptationRow } from '../../models/adaptation.ts'
import type { AdaptationLogRow } from '../../models/adaptation-log.ts'
import { decodeCursor, pageOf } from '../page.ts'
import type { Page, PageRequest } from '../page.ts'
import type { BatchDetail, BatchResult, ChangeResult, CommandDetail, EventDetail } from './log-row.ts'
import { recordOf } from './record.ts'
import type { AdaptationRecord } from './record.ts'

/** An adaptation as its durable log says it stands: the same from every process. */
export interface AdaptationView {
  readonly record: AdaptationRecord
  readonly state: 'adapting' | 'frozen' | 'ended'
  readonly frozen: { readonly reason: string; readonly at: Date; readonly by: string } | null
  readonly revision: number
  readonly nextSequence: number
  readonly asOf: number | null
  readonly validUntil: number | null
  readonly rejectionsInARow: number
  readonly lastBatch: LogEntryView | null
  readonly endedAt: Date | null
}

/** One entry of the log. */
export type LogEntryView = { readonly position: number; readonly sequence: number | null; readonly revision: number; readonly at: Date } & (
  | { readonly entry: 'batch'; readonly detail: BatchDetail; readonly result: BatchResult; readonly jointNames: readonly string[] }
  | { readonly entry: 'event'; readonly detail: EventDetail; readonly result: ChangeResult }
  | { readonly entry: 'command'; readonly detail: CommandDetail; readonly result: ChangeResult }
)

const withoutContent = { exclude: ['content'] }

export function createReading({ database }: { database: Database }) {
  const { Adaptation, AdaptationLog } = database.models

  async function find(teamId: string, id: string): Promise<AdaptationRow> {
    const row = await Adaptation.findOne({ where: { id, teamId } })
    if (row === null) throw new Refusal('not-found', 'There is no such adaptation in your team. GET /v1/adaptations lists them.')
    return row
  }

  /** Two look-ups by primary key an adaptation: its newest entry, and its newest batch. */
  async function view(row: AdaptationRow): Promise<AdaptationView> {
    const record = recordOf(row)
    const newest = await AdaptationLog.findOne({ where: { adaptationId: row.id }, order: [['position', 'DESC']], attributes: withoutContent })
    const lastBatch = newest === null || newest.entry === 'batch' ? newest
      : await AdaptationLog.findOne({ where: { adaptationId: row.id, entry: 'batch' }, order: [['position', 'DESC']], attributes: withoutContent })
    const asOf = newest?.asOf ?? null
    return {
      record,
      state: row.state,
      frozen: row.state === 'frozen' ? { reason: row.frozenReason ?? '', at: row.frozenAt as Date, by: row.frozenBy ?? '' } : null,
      revision: Number(newest?.revision ?? 0),
      nextSequence: Number(newest?.nextSequence ?? 1),
      asOf,
      validUntil: asOf === null ? null : asOf + record.settings.horizon,
      rejectionsInARow: newest?.rejections ?? 0,
      lastBatch: lastBatch && entryView(lastBatch, record),
      endedAt: row.endedAt ?? null,
    }
  }

  return {
    find,

    async get(teamId: string, id: string): Promise<AdaptationView> {
      return view(await find(teamId, id))
    },

    async list(
      teamId: string, { cursor, limit, state, model, robot }: PageRequest & { state?: AdaptationRow['state']; model?: string; robot?: string },
    ): Promise<Page<AdaptationView>> {
      const rows = await Adaptation.findAll({
        where: {
          teamId,
          ...(state !== undefined && { state }),
          ...(model !== undefined && { model }),
          ...(robot !== undefined && { robot }),
          ...(cursor !== undefined && { id: { [Op.lt]: decodeCursor(cursor, 'text') } }),
        },
        order: [['id', 'DESC']],
        limit: limit + 1,
      })
      const page = pageOf(rows, limit, ({ id }) => [id], (row) => row)
      return { items: await Promise.all(page.items.map(view)), nextCursor: page.nextCursor }
    },

    async log(
      teamId: string, id: string,
      { cursor, limit, entry, verdict }: PageRequest & { entry?: AdaptationLogRow['entry']; verdict?: 'accepted' | 'rejected' | 'stored' },
    ): Promise<Page<LogEntryView>> {
      const record = recordOf(await find(teamId, id))
      const rows = await AdaptationLog.findAll({
        where: {
          adaptationId: id,
          ...(entry !== undefined && { entry }),
          ...(verdict !== undefined && { verdict }),
          ...(cursor !== undefined && { position: { [Op.lt]: decodeCursor(cursor, 'number') } }),
        },
        order: [['position', 'DESC']],
        limit: limit + 1,
        attributes: withoutContent,
      })
      return pageOf(rows, limit, ({ position }) => [Number(position)], (row) => entryView(row, record))
    },
  }
}

function entryView(row: AdaptationLogRow, { arm }: AdaptationRecord): LogEntryView {
  const detail = JSON.parse(row.detail)
  const result = JSON.parse(row.answer)
  return {
    position: Number(row.position),
    sequence: row.sequence === null ? null : Number(row.sequence),
    revision: Number(row.revision),
    at: row.at,
    entry: row.entry,
    detail,
    result,
    ...(row.entry === 'batch' && { jointNames: arm.jointNames }),
  } as LogEntryView
}

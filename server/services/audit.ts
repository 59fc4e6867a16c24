import type { Transaction } from 'sequelize'
import type { Clock } from '../clock.ts'
import type { Database } from '../database/connection.ts'
import { uuid7 } from '../database/uuid7.ts'
import { callerLabel } from './permissions.ts'
import type { Caller } from './permissions.ts'

export interface AuditRecord {
  /** Who did it; 'system' for what the server does by itself. */
  by: Caller | 'system'
  /** Needed when the system acts, or where the caller's own team is not the one concerned. */
  teamId?: string | null
  action: string
  subject: { kind: string; id: string; name: string }
  /** What changed, never a secret. */
  before?: unknown
  after?: unknown
  reason?: string
  requestId?: string
}

export interface Audit {
  /** Appends one event in the transaction of the change it tells of: both happen or neither. */
  record(transaction: Transaction, record: AuditRecord): Promise<void>
}

export function createAudit({ database, clock }: { database: Database; clock: Clock }): Audit {
  return {
    async record(transaction, { by, teamId, action, subject, before, after, reason, requestId }) {
      const caller = by === 'system' ? undefined : by
      await database.models.AuditEvent.create(
        {
          id: uuid7(),
          teamId: teamId ?? caller?.teamId ?? null,
          at: clock.now(),
          actorKind: caller?.kind ?? 'system',
          actorId: caller?.id ?? null,
          actorName: caller ? callerLabel(caller) : 'Heftwise',
          action,
          subjectKind: subject.kind,
          subjectId: subject.id,
          subjectName: subject.name,
          stateBefore: before ?? null,
          stateAfter: after ?? null,
          reason: reason ?? null,
          requestId: requestId ?? null,
        },
        { transaction },
      )
    },
  }
}

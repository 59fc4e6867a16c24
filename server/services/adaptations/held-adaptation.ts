import type { Logger } from 'pino'
import type { Transaction } from 'sequelize'
import type { Adaptation, AdaptationState, BatchOutcome, ChangeOutcome, LogEntry, Refusal as MachineRefusal } from '../../../shared/dynamics/index.ts'
import { Refusal } from '../../../shared/contract/problems.ts'
import type { Clock } from '../../clock.ts'
import type { Database } from '../../database/connection.ts'
import { CommitError } from './group-commit.ts'
import type { GroupCommit } from './group-commit.ts'
import { answerText } from './log-row.ts'
import type { BatchResult, ChangeResult, LogRow } from './log-row.ts'
import type { AdaptationRecord } from './record.ts'

/** Log entries between two checkpoints: a rebuild replays at most so many. */
const checkpointEvery = 128
/** Entries of one adaptation that may wait for the disk; each holds a state. */
const mostInFlight = 32

/** An entry to be made part of the log. */
export interface Draft {
  readonly entry: LogEntry
  /** JSON: what the entry says, without its matrices. */
  readonly detail: string
  readonly content: Buffer | null
  /** What else is to happen in the transaction in which the adaptation changes its state, and only then. */
  readonly onChange: (transaction: Transaction, changedTo: AdaptationState | null) => Promise<void>
}

interface InFlight {
  readonly draft: Draft
  readonly answer: Promise<BatchResult | ChangeResult>
}

export interface HeldDependencies {
  readonly database: Database
  readonly commits: GroupCommit
  readonly clock: Clock
  readonly log: Logger
}

/** The adaptation was let go while a request was on its way to it: hold it again. */
export class LetGo extends Error {}

/**
 * An adaptation in this process's memory: its machine, what is prepared but not yet durable, and who waits for what.
 * The machine serves only what the log has: publish follows the commit.
 */
export class HeldAdaptation {
  readonly record: AdaptationRecord
  readonly machine: Adaptation
  readonly epoch: number
  usedAt = performance.now()

  readonly #d: HeldDependencies
  readonly #onDrop: (held: HeldAdaptation) => void
  readonly #inFlight = new Map<number, InFlight>()
  readonly #waiters = new Set<() => void>()
  /** Of the newest durable entry, and of the newest checkpoint. */
  #durable: number
  #checkpointed: number
  /** Closed while an entry is committed alone. */
  #gate: Promise<void> | null = null
  /** Raised by every discard, so that the failure of an older entry is not taken for one of a newer. */
  #generation = 0
  #dropped = false

  constructor(
    d: HeldDependencies,
    { record, machine, epoch, position, checkpointed, onDrop }: {
      record: AdaptationRecord
      machine: Adaptation
      epoch: number
      position: number
      checkpointed: number
      onDrop: (held: HeldAdaptation) => void
    },
  ) {
    this.#d = d
    this.record = record
    this.machine = machine
    this.epoch = epoch
    this.#durable = position
    this.#checkpointed = checkpointed
    this.#onDrop = onDrop
  }

  get dropped(): boolean {
    return this.#dropped
  }

  /** Position of the newest durable entry. */
  get position(): number {
    return this.#durable
  }

  get isIdle(): boolean {
    return this.#inFlight.size === 0 && this.#gate === null && this.#waiters.size === 0
  }

  /**
   * Makes an entry part of the log and of what is served.
   *
   * @returns what it led to, once it is durable
   * @throws {Refusal} it may not enter the log, or could not be stored
   * @throws {LetGo}
   */
  async append(draft: Draft): Promise<BatchResult | ChangeResult> {
    while (this.#gate !== null || this.#inFlight.size >= mostInFlight) await (this.#gate ?? this.#oldest())
    if (this.#dropped) throw new LetGo()
    this.usedAt = performance.now()
    const { entry } = draft
    const refusal = this.machine.check(entry)
    if (refusal?.code === 'sequence_repeated') return this.#repeat(draft)
    if (refusal !== null) throw problemOf(refusal)
    const outcome = this.machine.prepare(entry)
    const row = this.#rowOf(draft, outcome)
    const result = outcome.kind === 'batch' ? outcome : { revision: outcome.revision, state: this.machine.tip().state.state }
    const isAlone = entry.kind === 'command' || outcome.changedTo !== null
    const answer = isAlone ? this.#commitAlone(draft, row, outcome.changedTo, result) : this.#commitGrouped(row, result)
    this.#inFlight.set(row.position, { draft, answer })
    const done = () => void this.#inFlight.delete(row.position)
    answer.then(done, done)
    return answer
  }

  /** Whether the revision is served, now or within the time. */
  async reaches(revision: number, withinMs: number): Promise<boolean> {
    const deadline = performance.now() + withinMs
    while (!this.#dropped && this.machine.status().revision < revision) {
      const left = deadline - performance.now()
      if (left <= 0) return false
      await new Promise<void>((wake) => {
        const timer = setTimeout(end, left)
        const waiters = this.#waiters
        function end(): void {
          clearTimeout(timer)
          waiters.delete(end)
          wake()
        }
        waiters.add(end)
      })
    }
    if (this.#dropped) throw new LetGo()
    return true
  }

  /** Resolves when everything that was on its way is durable or has failed. */
  async settled(): Promise<void> {
    await Promise.allSettled([...this.#inFlight.values()].map(({ answer }) => answer))
  }

  /** Gives the memory back. What was prepared and is not durable is gone: the log decides. */
  drop(error: CommitError): void {
    if (this.#dropped) return
    this.#dropped = true
    this.#generation++
    this.#onDrop(this)
    this.#d.commits.drop(this.record.id, error)
    this.machine.release()
    this.#wake()
  }

  /** Keeps a rebuild short. Failing to is no harm. */
  checkpoint(): Promise<void> {
    if (this.#checkpointed === this.#durable) return Promise.resolve()
    this.#checkpointed = this.#durable
    return this.#d.database.pool
      .query('INSERT IGNORE INTO adaptation_checkpoints (adaptation_id, position, bytes) VALUES (?, ?, ?)', [
        this.record.id, this.#durable, Buffer.from(this.machine.checkpoint()),
      ])
      .then(() => undefined, (error: unknown) => this.#d.log.warn({ err: error, adaptation: this.record.id }, 'a checkpoint could not be written'))
  }

  #rowOf({ entry, detail, content }: Draft, outcome: BatchOutcome | ChangeOutcome): LogRow {
    const tip = this.machine.tip()
    return {
      adaptationId: this.record.id,
      position: this.#durable + this.machine.inFlight,
      entry: entry.kind,
      sequence: entry.kind === 'command' ? null : entry.sequence,
      revision: outcome.revision,
      verdict: outcome.kind === 'batch' ? outcome.verdict : null,
      at: this.#d.clock.now(),
      detail,
      content,
      answer: answerText(outcome.kind === 'batch' ? outcome : { revision: outcome.revision, state: tip.state.state }),
      nextSequence: tip.nextSequence,
      asOf: tip.asOf,
      rejections: tip.rejectionsInARow,
    }
  }

  #commitGrouped(row: LogRow, result: BatchResult | ChangeResult): Promise<BatchResult | ChangeResult> {
    const generation = this.#generation
    return new Promise((resolve, reject) => {
      this.#d.commits.add({
        row,
        epoch: this.epoch,
        committed: () => {
          this.#publish()
          resolve(result)
        },
        failed: (error) => {
          if (generation === this.#generation) this.#undo(error)
          reject(storeProblem(error))
        },
      })
    })
  }

  /** State changes are rare and carry the audit trail and the change feed: a transaction of their own, with nothing beside it. */
  #commitAlone(
    draft: Draft, row: LogRow, changedTo: AdaptationState | null, result: BatchResult | ChangeResult,
  ): Promise<BatchResult | ChangeResult> {
    const generation = this.#generation
    const before = [...this.#inFlight.values()].map(({ answer }) => answer)
    const work = async (): Promise<BatchResult | ChangeResult> => {
      await Promise.allSettled(before)
      if (this.#dropped || generation !== this.#generation) throw storeProblem(new CommitError('unreachable', 'An entry before this one could not be stored.'))
      try {
        await this.#d.database.transaction(async (transaction) => {
          const { models } = this.#d.database
          const lease = await models.Adaptation.findByPk(this.record.id, { attributes: ['leaseEpoch'], transaction, lock: true })
          if (Number(lease?.leaseEpoch) !== this.epoch) throw new CommitError('lease-lost', 'Another process has taken the adaptation over.')
          await models.AdaptationLog.create(row, { transaction })
          await draft.onChange(transaction, changedTo)
        })
      } catch (error) {
        // Whether the commit went through is not known here, so the log is asked.
        const failure = error instanceof CommitError ? error : new CommitError('unknown', 'The entry could not be stored for certain.', error)
        this.drop(failure)
        throw error instanceof Refusal ? error : storeProblem(failure)
      }
      this.#publish()
      return result
    }
    let open = (): void => undefined
    this.#gate = new Promise((resolve) => (open = resolve))
    return work().finally(() => {
      this.#gate = null
      open()
    })
  }

  #publish(): void {
    // Taken over by another process between commit and here: stored it is, served it will be there.
    if (this.#dropped) return
    this.machine.publish()
    this.#durable++
    this.#wake()
    if (this.#durable - this.#checkpointed >= checkpointEvery) void this.checkpoint()
  }

  #undo(error: CommitError): void {
    if (error.outcome !== 'unreachable') return this.drop(error)
    this.#generation++
    this.#d.commits.drop(this.record.id, error)
    this.machine.discard()
  }

  /** The stored sequence again: the stored answer where the content is the same. */
  async #repeat(draft: Draft): Promise<BatchResult | ChangeResult> {
    const { entry, detail, content } = draft
    const sequence = entry.kind === 'command' ? 0 : entry.sequence
    for (const { draft: other, answer } of this.#inFlight.values()) {
      if (other.entry.kind === 'command' || other.entry.sequence !== sequence) continue
      if (other.entry.kind !== entry.kind || !isSame(other, detail, content)) throw mismatch(sequence)
      return answer
    }
    const stored = await storedAnswer(this.#d.database, this.record.id, draft)
    if (stored === null) {
      const next = this.machine.tip().nextSequence
      throw new Refusal('sequence-mismatch', `Sequence ${sequence} was declared as skipped, so it cannot come any more. ${next} comes next.`, { extra: { expected_sequence: next } })
    }
    return stored
  }

  async #oldest(): Promise<void> {
    const [first] = this.#inFlight.values()
    await first?.answer.catch(() => undefined)
  }

  #wake(): void {
    for (const wake of [...this.#waiters]) wake()
  }
}

/**
 * What was answered to a stored batch or event.
 *
 * @returns null: the log has no such sequence
 * @throws {Refusal} sequence-mismatch: it was stored with other content
 */
export async function storedAnswer(database: Database, adaptationId: string, draft: Draft): Promise<BatchResult | ChangeResult | null> {
  const { entry, detail, content } = draft
  if (entry.kind === 'command') return null
  const [row] = await database.pool.query<{ entry: string; detail: string; content: Buffer | null; answer: string }[]>(
    'SELECT entry, detail, content, answer FROM adaptation_log WHERE adaptation_id = ? AND sequence = ?', [adaptationId, entry.sequence],
  )
  if (row === undefined) return null
  if (row.entry !== entry.kind || !isSame(row, detail, content)) throw mismatch(entry.sequence)
  return JSON.parse(row.answer) as BatchResult | ChangeResult
}

function isSame(stored: { detail: string; content: Buffer | null }, detail: string, content: Buffer | null): boolean {
  if (stored.detail !== detail || (stored.content === null) !== (content === null)) return false
  return content === null || content.equals(stored.content as Buffer)
}

function mismatch(sequence: number): Refusal {
  return new Refusal('sequence-mismatch', `Sequence ${sequence} is stored with other content. Each batch and event takes the next number; only an exact repetition may use one again.`, {
    errors: [{ pointer: '/sequence', detail: `${sequence} was used already, with other content.` }],
  })
}

/** The machine's refusals as the contract's problems. */
function problemOf(refusal: MachineRefusal): Refusal {
  const { code, detail } = refusal
  switch (code) {
    case 'sequence_gap':
    case 'sequence_repeated':
      return new Refusal('sequence-gap', detail, {
        errors: [{ pointer: '/sequence', detail }], extra: { expected_sequence: refusal.expectedSequence },
      })
    case 'time_not_rising':
      return new Refusal('time-not-rising', `${detail} Times must rise strictly, also across batches; after a restart of the clock send the event "restarted".`, {
        errors: [{ pointer: `/time/${refusal.row}`, row: refusal.row, detail }],
      })
    case 'ended':
      return new Refusal('adaptation-ended', `${detail} Start another one.`)
    default:
      return new Refusal('adaptation-state', detail)
  }
}

/** What a sender is told when its entry did not become durable. */
function storeProblem(error: CommitError): Refusal {
  const headers = { 'Retry-After': '1' }
  switch (error.outcome) {
    case 'lease-lost':
      return new Refusal('held-elsewhere', 'Another server process has just taken this adaptation over. Nothing was stored; send it again.', { headers, cause: error })
    case 'unknown':
      return new Refusal('not-ready', 'The database broke off while this was being stored, so it may be stored or not. Send it again with the same sequence: it is never counted twice.', { headers, cause: error })
    default:
      return new Refusal('not-ready', 'The database does not answer just now. Nothing was stored; send it again with the same sequence.', { headers, cause: error })
  }
}

import { completeSettings, SettingError } from '../../../shared/dynamics/index.ts'
import type {
  AdaptationState, GuardSettings, Kernels, PredictQuery, Prediction, Scheme, Snapshot, UpdateSettings,
} from '../../../shared/dynamics/index.ts'
import { Refusal } from '../../../shared/contract/problems.ts'
import { uuid7 } from '../../database/uuid7.ts'
import type { Dependencies } from '../../dependencies.ts'
import type { LiveVersions, ServedVersion } from '../live-versions.ts'
import { findModel, requireModelInUse } from '../model-records.ts'
import type { Page, PageRequest } from '../page.ts'
import { callerLabel, requireAction } from '../permissions.ts'
import type { Caller } from '../permissions.ts'
import type { Predictions } from '../predictions.ts'
import type { VersionRecord, VersionService } from '../versions.ts'
import { createBatchRows } from './batch-rows.ts'
import type { BatchRows } from './batch-rows.ts'
import { createDirectory, Ended } from './directory.ts'
import type { Directory, HeldElsewhere } from './directory.ts'
import { createGroupCommit } from './group-commit.ts'
import { LetGo, storedAnswer } from './held-adaptation.ts'
import type { Draft, HeldAdaptation } from './held-adaptation.ts'
import { createLeases } from './leases.ts'
import { batchEntry, contentOf } from './log-row.ts'
import type { AccelerationKind, BatchDetail, BatchResult, ChangeResult, CommandDetail, EventDetail, EventKind, Payload } from './log-row.ts'
import { createReading } from './reading.ts'
import type { AdaptationView, LogEntryView } from './reading.ts'
import type { AdaptationContext, AdaptationRecord, AdaptedArm } from './record.ts'

export { HeldElsewhere } from './directory.ts'
export type { AdaptationView, LogEntryView } from './reading.ts'
export type { AdaptationContext, AdaptationRecord, AdaptedArm } from './record.ts'
export type { BatchResult, ChangeResult, Payload } from './log-row.ts'
export type { BatchRows } from './batch-rows.ts'

export interface NewAdaptation {
  readonly model: string
  readonly version?: number
  readonly loss: 'mse' | { readonly name: string; readonly version?: number }
  readonly robot: string
  readonly context?: AdaptationContext
  readonly scheme?: Scheme
  readonly update?: Partial<UpdateSettings>
  readonly guard?: Partial<GuardSettings>
}

/** A batch, joints in the arm's order. */
export interface GivenBatch {
  readonly sequence: number
  readonly skipped: number
  readonly accelerationKind: AccelerationKind
  readonly rows: number
  /** time (rows), then position, velocity, acceleration and torque, rows × n each, in one block that nobody changes any more. */
  readonly numbers: Float64Array
}

export interface GivenEvent {
  readonly sequence: number
  readonly skipped: number
  readonly time: number
  readonly kind: EventKind
  readonly payload: Payload | null
}

/** What an adapted prediction says beside its torques. */
export interface ServedState {
  readonly record: AdaptationRecord
  readonly revision: number
  readonly asOf: number | null
  readonly validUntil: number | null
}

export interface AdaptationSnapshot {
  readonly record: AdaptationRecord
  readonly base: ServedVersion
  readonly snapshot: Snapshot
}

export type Command = 'freeze' | 'resume' | 'reset' | 'end'

export interface AdaptationService {
  create(caller: Caller, given: NewAdaptation, requestId?: string): Promise<AdaptationView>
  get(caller: Caller, id: string): Promise<AdaptationView>
  list(caller: Caller, page: PageRequest & { state?: 'adapting' | 'frozen' | 'ended'; model?: string; robot?: string }): Promise<Page<AdaptationView>>
  log(
    caller: Caller, id: string, page: PageRequest & { entry?: 'batch' | 'event' | 'command'; verdict?: 'accepted' | 'rejected' | 'stored' },
  ): Promise<Page<LogEntryView>>
  /** The rows of a stored batch, with what was predicted for them before it. */
  rows(caller: Caller, id: string, position: number): Promise<BatchRows>
  /**
   * Learns from a batch. The answer comes when it is durable.
   *
   * @param read  makes the batch of a request, once the adaptation's arm is known
   */
  postBatch<T extends GivenBatch>(caller: Caller, id: string, read: (arm: AdaptedArm) => T): Promise<{ batch: T; result: BatchResult; record: AdaptationRecord }>
  postEvent(caller: Caller, id: string, event: GivenEvent, requestId?: string): Promise<ChangeResult>
  command(caller: Caller, id: string, command: Command, reason: string, requestId?: string): Promise<AdaptationView>
  /**
   * Predicts with the served state. `answer` is called at once with what the next prediction overwrites.
   *
   * @throws {Refusal} revision-not-reached: not within 200 ms
   */
  predict<T, Q extends PredictQuery & { readonly ahead: Float64Array | null; readonly minRevision: number }>(
    caller: Caller, id: string, read: (arm: AdaptedArm) => Q, answer: (query: Q, prediction: Prediction, state: ServedState) => T,
  ): Promise<T>
  snapshot(caller: Caller, id: string): Promise<AdaptationSnapshot>
  /** Makes a version of the adapted network. */
  promote(caller: Caller, id: string, reason: string, requestId?: string): Promise<VersionRecord>
  /** The process that holds an adaptation does not answer: take over. */
  holderIsGone(error: HeldElsewhere): Promise<void>
  readonly processId: string
  start(): Promise<void>
  /** This process listens on that port: others may forward requests to it. */
  announce(port: number): Promise<void>
  stop(): Promise<void>
}

const minRevisionWaitMs = 200

export function createAdaptationService(d: Dependencies & {
  kernels: Kernels
  liveVersions: LiveVersions
  predictions: Predictions
  versions: VersionService
}): AdaptationService {
  const { database, clock, audit, changeFeed, log, kernels, liveVersions, predictions, versions, settings } = d
  const { Adaptation, Loss, LossVersion } = database.models
  const leases = createLeases({ database, changeFeed, log, peerAddress: settings.peerAddress })
  const commits = createGroupCommit({ pool: database.pool, ...settings.groupCommit })
  const directory: Directory = createDirectory({ ...d, kernels, leases, commits, liveVersions })
  const reading = createReading({ database })
  const batchRows = createBatchRows({ database, kernels, directory })

  async function lossVersionFor(teamId: string, { name, version }: { name: string; version?: number }, served: ServedVersion) {
    const loss = await Loss.findOne({ where: { teamId, name } })
    if (loss === null) {
      throw new Refusal('not-found', `There is no loss called "${name}" in your team. GET /v1/losses lists them; "mse" is always there.`, {
        errors: [{ pointer: '/loss/name', detail: 'No loss of this name.' }],
      })
    }
    const rows = await LossVersion.findAll({ where: { lossId: loss.id, ...(version !== undefined && { number: version }) }, order: [['number', 'DESC']] })
    if (rows.length === 0) {
      throw new Refusal('not-found', version === undefined
        ? `Loss "${name}" has no version yet. Meta-train or import one.`
        : `Loss "${name}" has no version ${version}. GET /v1/losses/${name}/versions lists them.`, { errors: [{ pointer: '/loss', detail: 'No such version.' }] })
    }
    const fitting = rows.find((row) => row.baseChecksum === served.checksum)
    if (fitting === undefined) {
      const base = [...new Set(rows.map((row) => row.baseVersion))].join(', ')
      const detail = `Loss "${name}"${version === undefined ? '' : ` version ${version}`} was learned for base version ${base}, this adaptation starts from version ${served.version} of model "${served.model}". Meta-train it for that version, or name a version that it was learned for.`
      throw new Refusal('loss-of-another-base', detail, { errors: [{ pointer: '/loss', detail }] })
    }
    return fitting
  }

  function settingsFor(given: NewAdaptation, served: ServedVersion, recommended: { scheme: Scheme; update: UpdateSettings } | null) {
    try {
      return completeSettings(given, recommended, served.arm.horizon)
    } catch (error) {
      if (!(error instanceof SettingError)) throw error
      const pointer = `/${error.field.replaceAll('.', '/').replace(/[A-Z]/g, (letter) => `_${letter.toLowerCase()}`)}`
      throw new Refusal('setting-refused', error.message, { cause: error, errors: [{ pointer, detail: error.message }] })
    }
  }

  /** The row's state and the audit trail follow when an entry changes the state. */
  function onChange(record: AdaptationRecord, by: Caller | 'system', why: { action: string; reason?: string; requestId?: string }): Draft['onChange'] {
    return async (transaction, changedTo) => {
      const at = clock.now()
      if (changedTo !== null) await Adaptation.update(columnsOf(changedTo, at, by), { where: { id: record.id }, transaction })
      await audit.record(transaction, {
        by, teamId: record.teamId, action: `adaptation.${why.action}`, subject: subjectOf(record), reason: why.reason, requestId: why.requestId,
        ...(changedTo !== null && { after: { state: changedTo.state } }),
      })
      await changeFeed.announce(transaction, { kind: 'adaptation', teamId: record.teamId, subject: record.id })
    }
  }

  function batchDraft(record: AdaptationRecord, batch: GivenBatch): Draft {
    const { sequence, skipped, rows, numbers, accelerationKind } = batch
    const entry = batchEntry({ sequence, skipped, rows, numbers }, record.arm.jointNames.length)
    const detail: BatchDetail = { time: numbers[rows - 1], rows, skipped, accelerationKind }
    return {
      entry,
      detail: JSON.stringify(detail),
      content: contentOf(numbers),
      onChange: onChange(record, 'system', { action: 'freeze', reason: 'The guards rejected too many batches in a row.' }),
    }
  }

  async function append(held: HeldAdaptation, draft: Draft): Promise<ChangeResult> {
    return (await held.append(draft)) as ChangeResult
  }

  async function runCommand(caller: Caller, id: string, command: Command, reason: string, requestId?: string): Promise<AdaptationView> {
    await directory.withHeld(caller.teamId, id, async (held) => {
      const detail: CommandDetail = { command, by: callerLabel(caller), reason }
      await append(held, {
        entry: { kind: 'command', command, reason },
        detail: JSON.stringify(detail),
        content: null,
        onChange: onChange(held.record, caller, { action: command, reason, requestId }),
      })
      if (command === 'end') await directory.letGo(held)
    })
    return reading.get(caller.teamId, id)
  }

  const actions = { freeze: 'freeze', resume: 'resume', reset: 'reset', end: 'adapt' } as const

  return {
    async create(caller, given, requestId) {
      requireAction(caller, 'adapt')
      const { teamId } = caller
      const served = await liveVersions.get(teamId, given.model, given.version)
      const lossVersion = given.loss === 'mse' ? null : await lossVersionFor(teamId, given.loss, served)
      const recommended = lossVersion === null ? recommendedOf(served) : { scheme: lossVersion.scheme, update: { fade: 1, ...lossVersion.updateSettings } }
      const complete = settingsFor(given, served, recommended)
      const id = uuid7()
      await database.transaction(async (transaction) => {
        requireModelInUse(await findModel(database, teamId, given.model, transaction))
        const row = await Adaptation.create({
          id,
          teamId,
          model: served.model,
          version: served.version,
          loss: given.loss === 'mse' ? null : given.loss.name,
          lossVersion: lossVersion?.number ?? null,
          robot: given.robot,
          context: JSON.stringify(given.context ?? {}),
          settings: JSON.stringify(complete),
          arm: JSON.stringify(armOf(served)),
          state: 'adapting',
          createdAt: clock.now(),
          createdBy: callerLabel(caller),
        }, { transaction })
        await audit.record(transaction, {
          by: caller, action: 'adaptation.create', subject: { kind: 'adaptation', id, name: row.robot }, requestId,
          after: { model: served.model, version: served.version, loss: given.loss === 'mse' ? 'mse' : `${given.loss.name} ${lossVersion?.number}`, robot: given.robot, settings: complete },
        })
        await changeFeed.announce(transaction, { kind: 'adaptation', teamId, subject: id })
      })
      return reading.get(teamId, id)
    },

    get(caller, id) {
      requireAction(caller, 'read_operation')
      return reading.get(caller.teamId, id)
    },

    list(caller, page) {
      requireAction(caller, 'read_operation')
      return reading.list(caller.teamId, page)
    },

    log(caller, id, page) {
      requireAction(caller, 'read_operation')
      return reading.log(caller.teamId, id, page)
    },

    rows(caller, id, position) {
      requireAction(caller, 'read_operation')
      return batchRows.get(caller.teamId, id, position)
    },

    async postBatch(caller, id, read) {
      requireAction(caller, 'post_batches')
      try {
        return await directory.withHeld(caller.teamId, id, async (held) => {
          const { record } = held
          const batch = read(record.arm)
          return { batch, record, result: (await held.append(batchDraft(record, batch))) as BatchResult }
        })
      } catch (error) {
        if (!(error instanceof Ended)) throw error
        // A sender that missed the answer to its last batch still gets it.
        const { record } = error
        const batch = read(record.arm)
        const result = (await storedAnswer(database, id, batchDraft(record, batch))) as BatchResult | null
        if (result === null) throw error
        return { batch, record, result }
      }
    },

    async postEvent(caller, id, { sequence, skipped, time, kind, payload }, requestId) {
      requireAction(caller, 'adapt')
      const detail: EventDetail = { time, skipped, kind, payload: payload && { mass: payload.mass, centerOfMass: payload.centerOfMass } }
      const draft = (onChanged: Draft['onChange']): Draft => ({
        entry: { kind: 'event', sequence, skipped, time, event: kind }, detail: JSON.stringify(detail), content: null, onChange: onChanged,
      })
      try {
        return await directory.withHeld(caller.teamId, id, (held) =>
          append(held, draft(onChange(held.record, caller, { action: 'freeze', reason: 'The tool was changed.', requestId }))))
      } catch (error) {
        if (!(error instanceof Ended)) throw error
        const stored = (await storedAnswer(database, id, draft(async () => undefined))) as ChangeResult | null
        if (stored === null) throw error
        return stored
      }
    },

    async command(caller, id, command, reason, requestId) {
      requireAction(caller, actions[command])
      return runCommand(caller, id, command, reason, requestId)
    },

    predict(caller, id, read, answer) {
      requireAction(caller, 'predict')
      return directory.withHeld(caller.teamId, id, async (held) => {
        const { record, machine } = held
        let query = read(record.arm)
        if (machine.status().revision < query.minRevision) {
          if (!(await held.reaches(query.minRevision, minRevisionWaitMs))) {
            const { revision } = machine.status()
            throw new Refusal('revision-not-reached', `Revision ${query.minRevision} is not served yet, ${revision} is. Its batch may be on its way: try again shortly.`, {
              headers: { 'Retry-After': '1' }, errors: [{ pointer: '/min_revision', detail: `${revision} is served.` }],
            })
          }
          // Other requests have been read into the same room meanwhile.
          query = read(record.arm)
        }
        const prediction = predictions.ofAdaptation(machine, query, query.ahead)
        const { revision, asOf, validUntil } = machine.status()
        return answer(query, prediction, { record, revision, asOf, validUntil })
      })
    },

    snapshot(caller, id) {
      requireAction(caller, 'snapshot')
      return directory.withHeld(caller.teamId, id, async (held) => {
        const { record } = held
        const base = await liveVersions.get(record.teamId, record.model, record.version)
        return { record, base, snapshot: snapshotOf(held) }
      })
    },

    async promote(caller, id, reason, requestId) {
      requireAction(caller, 'build')
      const { record, snapshot, base } = await directory.withHeld(caller.teamId, id, async (held) => {
        await held.settled()
        const { record } = held
        const base = await liveVersions.get(record.teamId, record.model, record.version)
        return { record, snapshot: snapshotOf(held), base }
      })
      if (record.settings.scheme === 'bias') {
        throw new Refusal('adaptation-state', 'Scheme bias adapts only what fades, and promoting drops that: nothing would be left to promote. Use scheme all or last_layer for changes that stay.')
      }
      if (snapshot.parameters.every((value, k) => value === base.artefact.parameters[k])) {
        throw new Refusal('adaptation-state', `Revision ${snapshot.revision} serves the base version's parameters: there is nothing to promote yet.`)
      }
      return database.transaction(async (transaction) => {
        const model = await findModel(database, caller.teamId, record.model, transaction)
        requireModelInUse(model)
        return versions.add(transaction, caller, model, {
          artefact: { description: base.artefact.description, parameters: snapshot.parameters },
          origin: { kind: 'promoted', adaptation: id, revision: snapshot.revision, parentVersion: record.version, reason },
          metrics: null,
          recommended: base.recommended,
          createdBy: callerLabel(caller),
        }, requestId)
      })
    },

    holderIsGone: (error) => directory.holderIsGone(error),
    processId: leases.processId,
    start: () => leases.start(),
    announce: (port) => leases.announce(port),
    async stop() {
      batchRows.stop()
      await directory.stop()
      await leases.stop()
    },
  }
}

function snapshotOf(held: HeldAdaptation): Snapshot {
  if (held.dropped) throw new LetGo()
  return held.machine.snapshot()
}

function recommendedOf({ recommended: { scheme, update } }: ServedVersion): { scheme: Scheme; update: UpdateSettings } | null {
  return update === undefined ? null : { scheme: scheme ?? 'all', update: { fade: 1, ...update } }
}

function armOf({ arm }: ServedVersion): AdaptedArm {
  const { torque, torqueRate } = arm.limits
  return {
    name: arm.name, jointNames: arm.jointNames, fingerprint: arm.fingerprint, units: arm.units,
    torque: Array.from(torque), torqueRate: torqueRate && Array.from(torqueRate),
  }
}

function subjectOf({ id, robot }: AdaptationRecord): { kind: string; id: string; name: string } {
  return { kind: 'adaptation', id, name: robot }
}

function columnsOf(state: AdaptationState, at: Date, by: Caller | 'system') {
  switch (state.state) {
    case 'adapting':
      return { state: state.state, frozenReason: null, frozenAt: null, frozenBy: null }
    case 'frozen':
      return { state: state.state, frozenReason: state.reason.slice(0, 1000), frozenAt: at, frozenBy: by === 'system' ? 'guard' : callerLabel(by) }
    case 'ended':
      return { state: state.state, endedAt: at }
  }
}

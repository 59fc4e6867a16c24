import { createHash } from 'node:crypto'
import { Router } from 'express'
import type { Request, Response } from 'express'
import type { components } from '../../shared/contract/openapi.generated.ts'
import { floatsToBase64, rateLimitsToWire, updateToWire, versionToWire } from '../../shared/contract/snapshots.ts'
import type { GuardSettings } from '../../shared/dynamics/index.ts'
import type { Contract } from '../middleware/contract.ts'
import { answerPage } from '../middleware/page-answer.ts'
import type {
  AdaptationContext, AdaptationSnapshot, AdaptationView, BatchResult, BatchRows, LogEntryView, NewAdaptation, Payload,
} from '../services/adaptations/index.ts'
import type { Services } from '../services/index.ts'
import { serveOrForward } from './forward.ts'
import { versionToJson } from './version-wire.ts'

type Schemas = components['schemas']

export function adaptationRoutes({ adaptations }: Services, contract: Contract): Router {
  const router = Router()
  const base = '/v1/adaptations/:adaptation'

  /** The process that holds the adaptation serves what needs its state. */
  const serve = (req: Request, res: Response, work: () => Promise<void>): Promise<void> => {
    const body = (req.input as { body?: unknown }).body
    return serveOrForward(adaptations, req, res, body === undefined ? undefined : Buffer.from(JSON.stringify(body)), work)
  }

  router.get('/v1/adaptations', contract.handle('listAdaptations', async ({ caller, query }, res, req) => {
    const page = await adaptations.list(caller, { cursor: query.cursor, limit: query.limit!, state: query.state, model: query.model, robot: query.robot })
    answerPage(req, res, { ...page, items: page.items.map(wireAdaptation) })
  }))

  router.post('/v1/adaptations', contract.handle('createAdaptation', async ({ caller, body, requestId }, res) => {
    const made = await adaptations.create(caller, newAdaptation(body), requestId)
    res.status(201).location(`/v1/adaptations/${made.record.id}`).json(wireAdaptation(made))
  }))

  router.get(base, contract.handle('getAdaptation', async ({ caller, path }, res) => {
    res.json(wireAdaptation(await adaptations.get(caller, path.adaptation)))
  }))

  router.delete(base, contract.handle('endAdaptation', ({ caller, path, query, requestId }, res, req) =>
    serve(req, res, async () => {
      res.json(wireAdaptation(await adaptations.command(caller, path.adaptation, 'end', query.reason, requestId)))
    })))

  for (const [operation, command] of [['freezeAdaptation', 'freeze'], ['resumeAdaptation', 'resume'], ['resetAdaptation', 'reset']] as const) {
    router.post(`${base}/${command}`, contract.handle(operation, ({ caller, path, body, requestId }, res, req) =>
      serve(req, res, async () => {
        res.json(wireAdaptation(await adaptations.command(caller, path.adaptation, command, body.reason, requestId)))
      })))
  }

  router.post(`${base}/events`, contract.handle('postEvent', ({ caller, path, body, requestId }, res, req) =>
    serve(req, res, async () => {
      const { sequence, skipped = 0, time, kind, payload } = body
      res.json(await adaptations.postEvent(caller, path.adaptation, { sequence, skipped, time, kind, payload: payload ? payloadOf(payload) : null }, requestId))
    })))

  router.post(`${base}/promote`, contract.handle('promoteAdaptation', ({ caller, path, body, requestId }, res, req) =>
    serve(req, res, async () => {
      const version = await adaptations.promote(caller, path.adaptation, body.reason, requestId)
      res.status(201).location(`/v1/models/${version.model}/versions/${version.version}`).json(versionToJson(version))
    })))

  router.get(`${base}/log`, contract.handle('listAdaptationLog', async ({ caller, path, query }, res, req) => {
    const page = await adaptations.log(caller, path.adaptation, { cursor: query.cursor, limit: query.limit!, entry: query.entry, verdict: query.verdict })
    answerPage(req, res, { ...page, items: page.items.map(wireLogEntry) })
  }))

  router.get(`${base}/log/:position/rows`, contract.handle('getBatchRows', async ({ caller, path }, res) => {
    res.json(wireRows(await adaptations.rows(caller, path.adaptation, path.position)))
  }))

  router.get(`${base}/snapshot`, contract.handle('getAdaptationSnapshot', ({ caller, path, header }, res, req) =>
    serve(req, res, async () => {
      const found = await adaptations.snapshot(caller, path.adaptation)
      const etag = snapshotEtag(found)
      res.setHeader('ETag', etag)
      // The state may change with every batch: asked again each time, sent again only when it has.
      res.setHeader('Cache-Control', 'private, no-cache')
      if (matches(header['if-none-match'], etag)) res.status(304).end()
      else res.json(wireSnapshot(found))
    })))

  return router
}

function newAdaptation({ update, guard, context, ...rest }: Schemas['NewAdaptation']): NewAdaptation {
  return {
    ...rest,
    ...(update && { update: withoutUndefined({ kind: update.kind, rate: update.rate, rowsPerStep: update.rows_per_step, fade: update.fade }) }),
    ...(guard && { guard: guardOf(guard) }),
    ...(context && { context: contextOf(context) }),
  }
}

const guardNames = {
  step_norm: 'stepNorm',
  torque_change: 'torqueChange',
  drift: 'drift',
  tolerance: 'tolerance',
  tolerance_floor: 'toleranceFloor',
  excitation: 'excitation',
  gap_periods: 'gapPeriods',
  rejections_before_freeze: 'rejectionsBeforeFreeze',
} as const satisfies Record<keyof Schemas['Guard'], keyof GuardSettings>

function guardOf(guard: Schemas['Guard']): Partial<GuardSettings> {
  return Object.fromEntries(Object.entries(guard).map(([name, value]) => [guardNames[name as keyof typeof guardNames], value]))
}

function wireGuard(guard: GuardSettings): Schemas['Guard'] {
  return Object.fromEntries(Object.entries(guardNames).map(([wire, name]) => [wire, guard[name]]))
}

function contextOf({ tool, payload_class: payloadClass, firmware, friction_setting: frictionSetting }: Schemas['Context']): AdaptationContext {
  return withoutUndefined({ tool, payloadClass, firmware, frictionSetting })
}

function wireContext({ tool, payloadClass, firmware, frictionSetting }: AdaptationContext): Schemas['Context'] {
  return withoutUndefined({ tool, payload_class: payloadClass, firmware, friction_setting: frictionSetting })
}

function payloadOf({ mass, center_of_mass: centerOfMass }: Schemas['Payload']): Payload {
  return withoutUndefined({ mass, centerOfMass })
}

function withoutUndefined<T extends object>(fields: T): T {
  return Object.fromEntries(Object.entries(fields).filter(([, value]) => value !== undefined)) as T
}

export function wireAdaptation(view: AdaptationView): Schemas['Adaptation'] {
  const { record, frozen } = view
  const { settings } = record
  return {
    id: record.id,
    model: record.model,
    version: record.version,
    loss: record.loss,
    robot: record.robot,
    context: wireContext(record.context),
    scheme: settings.scheme,
    update: updateToWire(settings.scheme, settings.update),
    guard: wireGuard(settings.guard),
    joint_names: [...record.arm.jointNames],
    state: view.state,
    frozen: frozen && { reason: frozen.reason, at: frozen.at.toISOString(), by: frozen.by },
    revision: view.revision,
    next_sequence: view.nextSequence,
    as_of: view.asOf,
    valid_until: view.validUntil,
    rejections_in_a_row: view.rejectionsInARow,
    last_batch: view.lastBatch && wireLogEntry(view.lastBatch),
    created_at: record.createdAt.toISOString(),
    created_by: record.createdBy,
    ended_at: view.endedAt && view.endedAt.toISOString(),
  }
}

function wireLogEntry(view: LogEntryView): Schemas['LogEntry'] {
  const common = { position: view.position, entry: view.entry, sequence: view.sequence, revision: view.revision, at: view.at.toISOString() }
  if (view.entry === 'batch') {
    const { time, rows, skipped, accelerationKind } = view.detail
    return { ...common, time, rows, skipped, acceleration_kind: accelerationKind, ...wireResult(view.result, view.jointNames) }
  }
  if (view.entry === 'event') {
    const { time, skipped, kind, payload } = view.detail
    return { ...common, time, skipped, kind, ...(payload && { payload: { mass: payload.mass, ...(payload.centerOfMass && { center_of_mass: [...payload.centerOfMass] }) } }) }
  }
  const { command, by, reason } = view.detail
  return { ...common, time: null, command, by, reason }
}

function wireResult(result: BatchResult, jointNames: readonly string[]) {
  const { verdict, reasons, before, after, jointBefore, jointAfter, weights, stepNorm } = result
  return {
    verdict,
    reasons: reasons.map(({ code, detail, joint, found, bound }) => ({
      code, detail,
      ...(joint !== null && { joint: jointNames[joint] }),
      ...(found !== null && { found: rounded(found) }),
      ...(bound !== null && { bound: rounded(bound) }),
    })),
    error: {
      before: rounded(before),
      after: after === null ? null : rounded(after),
      per_joint: Array.from(jointBefore, (value, k) => ({ before: rounded(value), after: jointAfter === null ? null : rounded(jointAfter[k]) })),
    },
    weights: Array.from(weights, rounded),
    step_norm: stepNorm === null ? null : rounded(stepNorm),
  }
}

/** Six significant digits, as in the answers of the hot routes. */
function rounded(value: number): number {
  return Number(value.toPrecision(6))
}

function wireRows({ record, position, batch, predicted }: BatchRows): Schemas['BatchRows'] {
  const n = record.arm.jointNames.length
  const matrix = (values: Float64Array, digits = false) =>
    Array.from({ length: batch.rows }, (_, row) => Array.from(values.subarray(row * n, (row + 1) * n), (value) => (digits ? rounded(value) : value)))
  return {
    position,
    joint_names: [...record.arm.jointNames],
    unit: [...record.arm.units],
    time: Array.from(batch.time),
    states: { position: matrix(batch.position), velocity: matrix(batch.velocity), acceleration: matrix(batch.acceleration) },
    torque: matrix(batch.torque),
    predicted: matrix(predicted, true),
    torque_limits: [...record.arm.torque],
  }
}

function wireSnapshot({ record, base, snapshot }: AdaptationSnapshot): Schemas['AdaptationSnapshot'] {
  const { scheme } = record.settings
  return {
    format: 'heftwise-adaptation-1',
    adaptation: record.id,
    revision: snapshot.revision,
    as_of: snapshot.asOf,
    valid_until: snapshot.validUntil,
    scheme,
    base: {
      format: 'heftwise-version-1',
      model: base.model,
      version: base.version,
      joint_names: [...record.arm.jointNames],
      unit: [...record.arm.units],
      torque_limits: [...record.arm.torque],
      torque_rate_limits: rateLimitsToWire(record.arm.torqueRate),
      ...versionToWire(base.artefact),
      checksum: base.checksum,
    },
    state: snapshot.bias === null
      ? { parameters: floatsToBase64(snapshot.parameters) }
      : { bias: Array.from(snapshot.bias.values), fade: snapshot.bias.fade },
  }
}

/** What is served changes with the revision, and when a stored batch lets time pass. */
function snapshotEtag({ record, snapshot }: AdaptationSnapshot): string {
  const state = createHash('sha256').update(new Uint8Array(snapshot.parameters.buffer, snapshot.parameters.byteOffset, snapshot.parameters.byteLength))
  if (snapshot.bias !== null) state.update(new Uint8Array(snapshot.bias.values.buffer))
  return `"${record.id.slice(-12)}-${snapshot.revision}-${state.digest('base64url').slice(0, 22)}"`
}

/** RFC 9110, section 13.1.2: a list of entity tags, compared weakly, or an asterisk. */
function matches(ifNoneMatch: string | undefined, etag: string): boolean {
  if (ifNoneMatch === undefined) return false
  return ifNoneMatch.trim() === '*' || [...ifNoneMatch.matchAll(/"[^"]*"/g)].some(([tag]) => tag === etag)
}

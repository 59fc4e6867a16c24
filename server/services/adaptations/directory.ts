import type { Kernels } from '../../../shared/dynamics/index.ts'
import { decodeLossVersion } from '../../../shared/dynamics/index.ts'
import type { LossVersion } from '../../../shared/dynamics/index.ts'
import { Refusal } from '../../../shared/contract/problems.ts'
import type { Dependencies } from '../../dependencies.ts'
import type { LiveVersions } from '../live-versions.ts'
import { CommitError } from './group-commit.ts'
import type { GroupCommit } from './group-commit.ts'
import { HeldAdaptation, LetGo } from './held-adaptation.ts'
import type { Holder, Leases } from './leases.ts'
import { inputsOf, recordOf } from './record.ts'
import type { AdaptationRecord } from './record.ts'
import { rebuild } from './recovery.ts'

/** Adaptations in memory beyond this are let go, the longest unused first; and any that was idle for so long. */
const mostHeld = 256
const idleMs = 10 * 60_000
const sweepMs = 15_000

/** Another live process holds the adaptation: ask there. */
export class HeldElsewhere extends Refusal {
  readonly adaptationId: string
  readonly holder: Holder

  constructor(adaptationId: string, holder: Holder) {
    super('held-elsewhere', 'Another server process holds this adaptation and cannot be reached from here. Try again; if it has stopped, this one takes over within seconds.', {
      headers: { 'Retry-After': '1' },
    })
    this.adaptationId = adaptationId
    this.holder = holder
  }
}

/** The adaptation has ended; its log can still be read. */
export class Ended extends Refusal {
  readonly record: AdaptationRecord

  constructor(record: AdaptationRecord) {
    super('adaptation-ended', 'The adaptation has ended: it serves and takes nothing more. Start another one.')
    this.record = record
  }
}

export interface Directory {
  /**
   * The team's adaptation in this process's memory: at once when it is there, otherwise rebuilt from its log.
   *
   * @throws {Refusal} not-found, not-ready; HeldElsewhere; Ended
   */
  hold(teamId: string, id: string): HeldAdaptation | Promise<HeldAdaptation>
  /** Does something with it, once more when it was let go in between. */
  withHeld<T>(teamId: string, id: string, work: (held: HeldAdaptation) => Promise<T> | T): Promise<T>
  /** The holder does not answer on its address any more. */
  holderIsGone(error: HeldElsewhere): Promise<void>
  /** What a record's machine is made of. */
  inputs(record: AdaptationRecord): Promise<ReturnType<typeof inputsOf>>
  /** Lets go of one that has ended. */
  letGo(held: HeldAdaptation): Promise<void>
  /** How many are in memory. */
  readonly size: number
  stop(): Promise<void>
}

export function createDirectory({ database, changeFeed, clock, log, kernels, leases, commits, liveVersions }: Dependencies & {
  kernels: Kernels
  leases: Leases
  commits: GroupCommit
  liveVersions: LiveVersions
}): Directory {
  const held = new Map<string, HeldAdaptation>()
  const loading = new Map<string, Promise<HeldAdaptation>>()
  const dependencies = { database, commits, clock, log }
  const letGo = new CommitError('unreachable', 'The adaptation was let go.')

  async function load(teamId: string, id: string): Promise<HeldAdaptation> {
    const row = await database.models.Adaptation.findOne({ where: { id, teamId } })
    if (row === null) throw new Refusal('not-found', 'There is no such adaptation in your team. GET /v1/adaptations lists them.')
    const record = recordOf(row)
    if (row.state === 'ended') throw new Ended(record)
    const made = await inputs(record)
    const taken = await leases.take(id)
    if ('holder' in taken) throw new HeldElsewhere(id, taken.holder)
    const { machine, position, checkpointed } = await rebuild({ pool: database.pool, kernels }, id, made)
    if (machine.status().state.state === 'ended') {
      machine.release()
      await leases.give(id, taken.epoch)
      throw new Ended(record)
    }
    const adaptation = new HeldAdaptation(dependencies, {
      record, machine, epoch: taken.epoch, position, checkpointed, onDrop: (which) => {
        if (held.get(id) === which) held.delete(id)
      },
    })
    held.set(id, adaptation)
    return adaptation
  }

  async function inputs(record: AdaptationRecord): Promise<ReturnType<typeof inputsOf>> {
    const { artefact } = await liveVersions.get(record.teamId, record.model, record.version)
    return inputsOf(record, artefact, await lossOf(record))
  }

  async function lossOf({ teamId, loss }: AdaptationRecord): Promise<LossVersion | 'mse'> {
    if (loss === 'mse') return 'mse'
    const { Loss, LossVersion } = database.models
    const parent = await Loss.findOne({ where: { teamId, name: loss.name } })
    const row = parent && (await LossVersion.scope('withArtefact').findOne({ where: { lossId: parent.id, number: loss.version } }))
    if (!row) throw new Error(`Loss ${loss.name} ${loss.version}, which an adaptation uses, is not there.`)
    return decodeLossVersion(row.artefact)
  }

  async function verify(id: string): Promise<void> {
    const adaptation = held.get(id)
    if (adaptation === undefined || (await leases.isOurs(id, adaptation.epoch))) return
    adaptation.drop(new CommitError('lease-lost', 'Another process has taken the adaptation over.'))
  }
  changeFeed.on('adaptation', ({ subject }) => verify(subject))
  changeFeed.onGap(async () => {
    for (const id of [...held.keys()]) await verify(id)
  })

  async function sweep(): Promise<void> {
    const now = performance.now()
    const byAge = [...held.values()].sort((a, b) => a.usedAt - b.usedAt)
    const surplus = byAge.length - mostHeld
    for (const [k, adaptation] of byAge.entries()) {
      if ((k < surplus || now - adaptation.usedAt > idleMs) && adaptation.isIdle) await evict(adaptation)
    }
  }

  async function evict(adaptation: HeldAdaptation): Promise<void> {
    const { usedAt, epoch, record } = adaptation
    await adaptation.checkpoint()
    if (!adaptation.isIdle || adaptation.usedAt !== usedAt || adaptation.dropped) return
    adaptation.drop(letGo)
    await leases.give(record.id, epoch)
  }
  const timer = setInterval(() => void sweep().catch((error: unknown) => log.warn({ err: error }, 'idle adaptations could not be let go')), sweepMs)
  timer.unref()

  function hold(teamId: string, id: string): HeldAdaptation | Promise<HeldAdaptation> {
    const adaptation = held.get(id)
    if (adaptation !== undefined) {
      if (adaptation.record.teamId !== teamId) throw new Refusal('not-found', 'There is no such adaptation in your team. GET /v1/adaptations lists them.')
      if (!leases.isAlive()) {
        throw new Refusal('not-ready', 'This process has lost touch with the database, so another may hold the adaptation by now. Try again shortly.', { headers: { 'Retry-After': '1' } })
      }
      adaptation.usedAt = performance.now()
      return adaptation
    }
    const key = `${teamId}/${id}`
    let promise = loading.get(key)
    if (promise === undefined) {
      promise = load(teamId, id)
      loading.set(key, promise)
      const done = () => void loading.delete(key)
      promise.then(done, done)
    }
    return promise
  }

  return {
    hold,
    async withHeld(teamId, id, work) {
      for (let attempt = 1; ; attempt++) {
        try {
          return await work(await hold(teamId, id))
        } catch (error) {
          if (!(error instanceof LetGo)) throw error
          if (attempt === 4) throw new Refusal('not-ready', 'The adaptation is being taken over again and again. Try again shortly.', { cause: error, headers: { 'Retry-After': '1' } })
        }
      }
    },
    holderIsGone: ({ adaptationId, holder }) => leases.takeFrom(adaptationId, holder.id),
    inputs,
    async letGo(adaptation) {
      adaptation.drop(letGo)
      await leases.give(adaptation.record.id, adaptation.epoch)
    },
    get size() {
      return held.size
    },
    async stop() {
      clearInterval(timer)
      await Promise.allSettled([...held.values()].map((adaptation) => adaptation.settled()))
      await commits.settled()
      for (const adaptation of [...held.values()]) {
        await adaptation.checkpoint()
        adaptation.drop(letGo)
      }
    },
  }
}

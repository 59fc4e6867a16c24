import { alder7 } from '../../shared/simulation/alder-7.ts'
import { CYCLE, createCell, nominalTorque, predictedTorque } from '../../shared/simulation/cell.ts'
import { createFeedForward } from '../../shared/simulation/feed-forward.ts'
import type { FeedForwardCounters } from '../../shared/simulation/feed-forward.ts'
import type { Shift } from '../../shared/simulation/pottery.ts'
import { DemoError } from './connection.ts'
import { REQUEST_EVERY } from './link.ts'
import type { Link } from './link.ts'

const JOINTS = alder7.limits.length

// What an answer takes on the simulated line where the simulation does not run in real time, s.
const SIMULATED_LATENCY = 0.02

// Exchanges in a row.
const MOST_UNANSWERED = 5

/** Root mean square errors of a trial, per joint, while a payload is carried and while not. */
export interface TrialErrors {
  /** s */
  readonly duration: number
  /** rad: desired less true position. */
  readonly tracking: number[]
  /** N·m: what feedback had to add to the feed-forward. */
  readonly torque: number[]
}

export interface TrialResult {
  readonly name: string
  readonly loaded: TrialErrors
  readonly unloaded: TrialErrors
  readonly link: Link['counters'] | undefined
  readonly feedForward: FeedForwardCounters | undefined
}

export interface TrialOptions {
  readonly name: string
  readonly shift: Shift
  readonly seed: number
  /** Left out: the controller is on its own. */
  readonly link?: Link
  /** Paces the trial like a real cell. */
  readonly isRealtime: boolean
  readonly signal: AbortSignal
  readonly onProgress: (now: number) => void
}

/** Runs a shift once. Stops early, with what was measured so far, when the signal is aborted. */
export async function runTrial({ name, shift, seed, link, isRealtime, signal, onProgress }: TrialOptions): Promise<TrialResult> {
  const { motion, loads } = shift
  const feedForward =
    link &&
    createFeedForward({
      joints: JOINTS,
      rampRate: alder7.limits.map((limit) => limit.torqueRate),
      holdCycles: 5,
      localSeconds: 0.5,
      returnCycles: 50,
    })
  const source = feedForward ? predictedTorque(alder7, feedForward) : nominalTorque(alder7)
  const cell = createCell({ arm: alder7, motion, source, seed, logRate: 50 })
  const [loaded, unloaded] = [createSums(), createSums()]
  const startMs = performance.now()
  const slice = Math.round(REQUEST_EVERY / 4 / CYCLE)
  let pending: Promise<void> | undefined
  let carried: (typeof loads)[number] | undefined
  let next = 0
  let failure: unknown
  let unanswered = 0

  function exchange(): Promise<void> {
    const [time, now] = [cell.motionTime, cell.now]
    return link!
      .exchange(time, now)
      .then(
        (horizon) => {
          if (horizon) feedForward!.accept(horizon, cell.motionTime, cell.now)
          unanswered = horizon ? 0 : unanswered + 1
          // A real cell falls back and waits; a run that nobody paces would only wait.
          if (unanswered === MOST_UNANSWERED && !isRealtime)
            failure = new DemoError('Heftwise has stopped answering. Is it still running?')
        },
        (error: unknown) => {
          failure = error
        },
      )
      .then(() => {
        pending = undefined
      })
  }

  function handle(): void {
    if (carried && cell.motionTime >= carried.to) {
      cell.release()
      link?.announce('released', cell.now)
      carried = undefined
    }
    if (!carried && next < loads.length && cell.motionTime >= loads[next].from) {
      carried = loads[next++]
      cell.grip(carried.payload)
      link?.announce('gripped', cell.now)
    }
  }

  function run(cycles: number): void {
    for (let k = 0; k < cycles && cell.motionTime < motion.duration; k++) {
      handle()
      const row = cell.cycle()
      if (row !== undefined) link?.log(row)
      addErrors(carried ? loaded : unloaded, cell)
    }
  }

  // The first horizon is there before the arm starts.
  if (link) await exchange()
  for (let slices = 0; cell.motionTime < motion.duration && !signal.aborted && failure === undefined; slices++) {
    if (link && pending === undefined && slices % 4 === 0) pending = exchange()
    run(slice)
    onProgress(cell.now)
    if (isRealtime) await sleepUntil(startMs + cell.now * 1000)
    else if (pending !== undefined && slices % 4 >= Math.ceil(SIMULATED_LATENCY / (slice * CYCLE)) - 1) await pending
  }
  await pending
  if (failure !== undefined && !signal.aborted) throw failure
  return {
    name,
    loaded: toErrors(loaded),
    unloaded: toErrors(unloaded),
    link: link?.counters,
    feedForward: feedForward?.counters,
  }
}

interface Sums {
  cycles: number
  readonly tracking: Float64Array
  readonly torque: Float64Array
}

function createSums(): Sums {
  return { cycles: 0, tracking: new Float64Array(JOINTS), torque: new Float64Array(JOINTS) }
}

function addErrors(sums: Sums, { desired, position, torque, feedForward }: ReturnType<typeof createCell>): void {
  sums.cycles++
  for (let j = 0; j < JOINTS; j++) {
    sums.tracking[j] += (desired.position[j] - position[j]) ** 2
    sums.torque[j] += (torque[j] - feedForward[j]) ** 2
  }
}

function toErrors({ cycles, tracking, torque }: Sums): TrialErrors {
  const root = (sum: number): number => Math.sqrt(sum / Math.max(cycles, 1))
  return { duration: cycles * CYCLE, tracking: Array.from(tracking, root), torque: Array.from(torque, root) }
}

function sleepUntil(ms: number): Promise<void> {
  const left = ms - performance.now()
  return new Promise((resolve) => (left > 0 ? setTimeout(resolve, left) : setImmediate(resolve)))
}

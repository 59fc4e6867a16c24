import type { Payload } from '../../shared/dynamics/rigid-body/index.ts'
import type { FeedForward } from '../../shared/simulation/feed-forward.ts'
import type { LogRow } from '../../shared/simulation/logger.ts'
import { createJointState } from '../../shared/simulation/motion.ts'
import type { Motion } from '../../shared/simulation/motion.ts'
import { ConnectionError, isProblem, TimeoutError } from '../index.ts'
import type { Heftwise, Schemas } from '../index.ts'

/** Seconds between two requests for predictions. */
export const REQUEST_EVERY = 0.08

// Samples of the desired trajectory a request asks for: enough that a late answer finds the last one still of use.
const SAMPLE_EVERY = 0.02
const SAMPLES = 14

// Batches and events that wait for the service at most: 4 s of work. Older ones are dropped, and declared as skipped.
const LONGEST_QUEUE = 50

/** Where torques come from: the live version of a model, or an adaptation that also learns from what the arm does. */
export type Source = { readonly model: string } | { readonly adaptation: string }

type Entry =
  | { readonly kind: 'batch'; readonly rows: readonly LogRow[] }
  | { readonly kind: 'event'; readonly event: Omit<Schemas['NewEvent'], 'sequence' | 'skipped'> }

/** What happened on the line. */
export interface LinkCounters {
  predictions: number
  /** Of them, from the base version, as the adaptation had not learned for longer than the arm trusts one. */
  onBase: number
  batches: { accepted: number; rejected: number; stored: number }
  /** Entries dropped because the service did not answer for long. */
  skipped: number
  /** Requests that failed for good. */
  failed: number
}

/** Carries rows and events from a cell to the service, and predictions back. Never in the control cycle's way. */
export interface Link {
  readonly counters: LinkCounters
  /** Takes a logged row, for the next batch. */
  log(row: LogRow): void
  /** Takes a grip or a release; it is sent when the rows before it are. */
  announce(kind: 'gripped' | 'released', time: number, payload?: Payload): void
  /** Sends what waits, then asks for predictions from a time on. Resolves with what was predicted, or undefined on failure. */
  exchange(time: number, now: number): Promise<Parameters<FeedForward['accept']>[0] | undefined>
}

export function createLink({
  heftwise,
  joints,
  source,
  motion,
  size,
  signal,
}: {
  heftwise: Heftwise
  joints: string
  source: Source
  motion: Motion
  size: number
  signal: AbortSignal
}): Link {
  const counters: LinkCounters = {
    predictions: 0,
    onBase: 0,
    batches: { accepted: 0, rejected: 0, stored: 0 },
    skipped: 0,
    failed: 0,
  }
  const call = { signal, timeoutMs: 2000 }
  const queue: Entry[] = []
  const announced: Extract<Entry, { kind: 'event' }>[] = []
  let rows: LogRow[] = []
  let sequence = 1
  let skipped = 0
  let asOf: number | null = null

  function closeBatch(): void {
    if (rows.length > 0) queue.push({ kind: 'batch', rows })
    rows = []
  }

  async function send(adaptation: string): Promise<void> {
    while (queue.length > LONGEST_QUEUE) {
      queue.shift()
      skipped++
      counters.skipped++
    }
    while (queue.length > 0) {
      const [entry] = queue
      const place = { sequence: sequence + skipped, skipped }
      if (entry.kind === 'batch') {
        const { verdict } = await heftwise.adaptations.postBatch(adaptation, { ...place, ...toBatch(joints, entry.rows) }, call)
        counters.batches[verdict]++
      } else await heftwise.adaptations.postEvent(adaptation, { ...place, ...entry.event }, call)
      sequence += skipped + 1
      skipped = 0
      queue.shift()
    }
  }

  async function predict(time: number, now: number): Promise<Parameters<FeedForward['accept']>[0]> {
    const times = Float64Array.from({ length: SAMPLES }, (_, k) => time + k * SAMPLE_EVERY)
    const body = { joints, ...desiredStates(motion, times, size) }
    const flat = (torque: readonly (readonly number[])[]): Float64Array => Float64Array.from(torque.flat())
    if ('model' in source) {
      const { torque } = await heftwise.predict(source.model, body, call)
      return { time: times, torque: flat(torque), expires: now + 1 }
    }
    // The motion's clock and the robot's differ by what the arm stood still for.
    const ahead = Array.from(times, (at) => Math.max(0, at - time + now - (asOf ?? now)))
    const answer = await heftwise.adaptations.predict(source.adaptation, { ...body, ahead }, call)
    asOf = answer.as_of
    // Frozen, it learns no more, and its time runs out. The version it began with goes on serving.
    if (answer.valid_until !== null && answer.valid_until <= now) {
      const { torque } = await heftwise.predict(answer.model, { ...body, version: answer.version }, call)
      counters.onBase++
      return { time: times, torque: flat(torque), expires: now + 1 }
    }
    return { time: times, torque: flat(answer.torque), expires: answer.valid_until ?? now + 1 }
  }

  return {
    counters,
    log(row) {
      // An event belongs between the rows before and after it.
      while (announced.length > 0 && announced[0].event.time < row.time) {
        closeBatch()
        queue.push(announced.shift()!)
      }
      rows.push(row)
    },
    announce(kind, time, payload) {
      announced.push({
        kind: 'event',
        event: { kind, time, ...(payload && { payload: { mass: payload.mass, center_of_mass: [...payload.centerOfMass] } }) },
      })
    },
    async exchange(time, now) {
      closeBatch()
      try {
        if ('adaptation' in source) await send(source.adaptation)
        else queue.length = 0
        const horizon = await predict(time, now)
        counters.predictions++
        return horizon
      } catch (error) {
        signal.throwIfAborted()
        if (isProblem(error) && error.problem?.expected_sequence !== undefined) {
          // An answer that was lost on the way had been stored all the same: go on where the service is.
          sequence = error.problem.expected_sequence
          skipped = 0
        } else if (!(
          error instanceof ConnectionError ||
          error instanceof TimeoutError ||
          (isProblem(error) && error.status >= 500)
        ))
          throw error
        counters.failed++
        return undefined
      }
    },
  }
}

function toBatch(joints: string, rows: readonly LogRow[]): Omit<Schemas['Batch'], 'sequence' | 'skipped'> {
  const matrix = (quantity: 'position' | 'velocity' | 'acceleration' | 'torque'): number[][] =>
    rows.map((row) => Array.from(row[quantity]))
  return {
    joints,
    time: rows.map((row) => row.time),
    position: matrix('position'),
    velocity: matrix('velocity'),
    acceleration: matrix('acceleration'),
    acceleration_kind: 'filtered',
    torque: matrix('torque'),
  }
}

function desiredStates(
  motion: Motion,
  times: Float64Array,
  size: number,
): { position: number[][]; velocity: number[][]; acceleration: number[][] } {
  const state = createJointState(size)
  const [position, velocity, acceleration]: number[][][] = [[], [], []]
  for (const time of times) {
    motion.sample(time, state)
    position.push(Array.from(state.position))
    velocity.push(Array.from(state.velocity))
    acceleration.push(Array.from(state.acceleration))
  }
  return { position, velocity, acceleration }
}

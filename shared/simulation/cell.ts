import { createRandom } from '../dynamics/random.ts'
import { createChain, gravityTorque, inverseDynamics } from '../dynamics/rigid-body/index.ts'
import type { Payload } from '../dynamics/rigid-body/index.ts'
import { createController } from './controller.ts'
import type { FeedForward, FeedForwardSource } from './feed-forward.ts'
import { createLogger } from './logger.ts'
import type { LogRow } from './logger.ts'
import { createJointState } from './motion.ts'
import type { JointState, Motion } from './motion.ts'
import type { SimulatedArm } from './simulated-arm.ts'
import { createSimulator } from './simulator.ts'

/** s: the control cycle of a cell, 1 kHz. */
export const CYCLE = 1e-3

/** Where a cell's controller gets its feed-forward from: called once a cycle, must not wait. */
export interface TorqueSource {
  /**
   * @param desired  desired state, at the arm's present speed along the path
   * @param time     s, on the motion's clock
   * @param now      s, on the robot's clock
   * @param out      out, length n
   */
  next(desired: JointState, time: number, now: number, out: Float64Array): FeedForwardSource
}

/** A simulated arm that tracks a motion. Everything about it follows from its seed and what it is fed. */
export interface Cell {
  readonly joints: number
  /** s since the start, on the robot's clock; rises by {@link CYCLE}. */
  readonly now: number
  /** s, on the motion's clock: falls behind `now` when the arm had to stop. */
  readonly motionTime: number
  /** Of the last cycle, length n: desired state, where the arm truly is, torque commanded, feed-forward in it. */
  readonly desired: JointState
  readonly position: Float64Array
  readonly torque: Float64Array
  readonly feedForward: Float64Array
  readonly source: FeedForwardSource
  /** Cycles in which a torque or rate limit was met, per joint. */
  readonly limited: Uint32Array
  /** Runs one control cycle; returns a logged row when one is due. */
  cycle(): LogRow | undefined
  grip(payload: Payload): void
  release(): void
}

export interface CellSettings {
  readonly arm: SimulatedArm
  readonly motion: Motion
  readonly source: TorqueSource
  /** Of the sensors' noise. */
  readonly seed: number
  /** Hz at which rows are logged. */
  readonly logRate: number
}

/** A cell whose arm stands at the start of the motion. */
export function createCell({ arm, motion, source, seed, logRate }: CellSettings): Cell {
  const n = arm.limits.length
  const desired = createJointState(n)
  motion.sample(0, desired)
  const simulator = createSimulator(arm.truth, desired.position, createRandom(seed))
  const controller = createController(arm, CYCLE)
  const logger = createLogger({ joints: n, cycle: CYCLE, rate: logRate })
  const [feedForward, torque, position, readTorque] = [0, 1, 2, 3].map(() => new Float64Array(n))
  // How long a stop and a start along the path take, s.
  const slowing = arm.fallback === 'controlled_stop' ? 0.3 : 0.02
  let cycles = 0
  let motionTime = 0
  let speed = 1
  let from: FeedForwardSource = 'local'

  // The path stays the same when the arm slows down: velocity scales with speed, acceleration with its square, and the change
  // of speed adds its share.
  function follow(): void {
    const target = from === 'fallback' ? 0 : 1
    const change = Math.max(-CYCLE / slowing, Math.min(CYCLE / slowing, target - speed))
    speed += change
    motionTime += speed * CYCLE
    motion.sample(motionTime, desired)
    for (let j = 0; j < n; j++) {
      desired.acceleration[j] = desired.acceleration[j] * speed * speed + (desired.velocity[j] * change) / CYCLE
      desired.velocity[j] *= speed
    }
  }

  return {
    joints: n,
    desired,
    position: simulator.position,
    torque,
    feedForward,
    limited: controller.limited,
    get now() {
      return cycles * CYCLE
    },
    get motionTime() {
      return motionTime
    },
    get source() {
      return from
    },
    cycle() {
      simulator.measure(position, readTorque)
      // The torque read now is the one applied since the last cycle; on the first there is none.
      const row = cycles === 0 ? undefined : logger.push(cycles * CYCLE, position, readTorque)
      if (cycles > 0) follow()
      from = source.next(desired, motionTime, cycles * CYCLE, feedForward)
      controller.cycle(desired, position, feedForward, torque)
      simulator.step(torque, CYCLE)
      cycles++
      return row
    },
    grip: (payload) => simulator.grip(payload),
    release: () => simulator.release(),
  }
}

/** Feed-forward from the arm's published description: what a controller has without a service, friction and payload unknown. */
export function nominalTorque(arm: SimulatedArm): TorqueSource {
  const chain = createChain(arm.nominal)
  return {
    next(desired, _time, _now, out) {
      inverseDynamics(chain, desired.position, desired.velocity, desired.acceleration, out)
      return 'local'
    },
  }
}

/** Feed-forward from predictions handed over ahead, with gravity by the published description as the local model. */
export function predictedTorque(arm: SimulatedArm, feedForward: FeedForward): TorqueSource {
  const chain = createChain(arm.nominal)
  const local = new Float64Array(chain.size)
  return {
    next(desired, time, now, out) {
      gravityTorque(chain, desired.position, local)
      feedForward.next(time, now, CYCLE, local, out)
      return feedForward.source
    },
  }
}

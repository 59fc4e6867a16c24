import type { Payload } from '../../shared/dynamics/rigid-body/index.ts'
import { createRandom } from '../../shared/dynamics/random.ts'
import type { Random } from '../../shared/dynamics/random.ts'
import { alder7 } from '../../shared/simulation/alder-7.ts'
import { multiSineMotion, pickMotion } from '../../shared/simulation/motion.ts'
import { recordMotion, restAfter } from '../../shared/simulation/recording.ts'
import type { Motion } from '../../shared/simulation/motion.ts'
import type { SimulatedRecording } from '../../shared/simulation/recording.ts'
import type { Schemas } from '../wire.ts'

/** Names under which the first run seeds the demo, and `npm run demo` finds it. */
export const scenario = { arm: alder7.name, model: 'alder-7-base', loss: 'alder-7-payload', robot: 'kiln-cart-loader-1' } as const

/** Alder-7 as the API takes it. */
export function alder7Arm(): Schemas['NewArm'] {
  return {
    name: scenario.arm,
    description: 'Seven-joint arm of an invented pottery works; loads shaped clay onto kiln carts. Simulated.',
    joints: alder7.nominal.joints.map(({ name }, j) => {
      const { lower, upper, velocity, torque, torqueRate } = alder7.limits[j]
      return {
        name,
        type: 'revolute',
        position_lower: lower,
        position_upper: upper,
        velocity_limit: velocity,
        torque_limit: torque,
        torque_rate_limit: torqueRate,
      }
    }),
    gravity: [...alder7.nominal.gravity],
    torque: { side: 'link', positive_accelerates: true, controller_adds: [] },
    fallback: alder7.fallback,
    horizon: 1,
    firmware: 'simulated',
  }
}

/** A payload and when it is in the gripper, s. */
export interface Load {
  readonly payload: Payload
  readonly from: number
  readonly to: number
}

/** A stretch of work: a motion, and what is carried in it. */
export interface Shift {
  readonly motion: Motion
  readonly loads: readonly Load[]
}

// A load every so many seconds, gripped and released at the rests after these.
const LOAD_EVERY = 20
const GRIP_AFTER = 4
const RELEASE_AFTER = 16

/**
 * Work of so many seconds: pick motions, another payload every 20 s.
 *
 * @param seconds  at least 10
 */
export function planShift(seconds: number, seed: number): Shift {
  const motion = pickMotion(alder7, createRandom(seed), seconds)
  const random = createRandom(seed + 1)
  const loads: Load[] = []
  for (let start = 0; start + GRIP_AFTER + 2 < seconds; start += LOAD_EVERY) {
    loads.push({
      payload: randomPayload(random),
      from: restAfter(motion, start + GRIP_AFTER),
      to: restAfter(motion, start + RELEASE_AFTER),
    })
  }
  return { motion, loads }
}

/** A recording of the demo: what it is, and how to make it again. */
export interface DemoRecording {
  readonly name: string
  readonly use: Schemas['RecordingUse']
  readonly context: Schemas['RecordingContext']
  make(): SimulatedRecording
}

/** Payloads of the works: shaped clay of 0.8 to 3 kg on a flat gripper. */
export function randomPayload(random: Random): Payload {
  const within = (low: number, high: number): number => low + (high - low) * random.uniform()
  const [mass, x, y, z] = [within(0.8, 3), within(-0.04, 0.04), within(-0.04, 0.04), within(0.03, 0.11)]
  return { mass: rounded(mass), centerOfMass: [rounded(x), rounded(y), rounded(z)] }
}

/** All recordings of the demo; motions, payloads and noise follow from their places in the list. */
export function demoRecordings(): DemoRecording[] {
  const list: DemoRecording[] = []
  const add = (
    kind: string,
    count: number,
    use: Schemas['RecordingUse'],
    seconds: number,
    isLoaded: boolean,
    isSwitched = false,
  ): void => {
    for (let k = 1; k <= count; k++) {
      const seed = 100 * (list.length + 1)
      const payload = isLoaded ? randomPayload(createRandom(seed)) : undefined
      const make = kind === 'slow' ? multiSineMotion : pickMotion
      list.push({
        name: `${kind}-${String(k).padStart(2, '0')}.csv`,
        use,
        context: {
          robot: scenario.robot,
          tool: 'flat gripper',
          motion: isSwitched ? 'grip and release' : kind === 'slow' ? 'slow sines' : 'pick',
          ...(payload && { payload: { mass: payload.mass, center_of_mass: [...payload.centerOfMass] } }),
        },
        make: () =>
          recordMotion(alder7, make(alder7, createRandom(seed + 1), seconds), {
            seed: seed + 2,
            payload,
            ...(isSwitched && { gripAfter: seconds / 3, releaseAfter: (2 * seconds) / 3 }),
          }),
      })
    }
  }
  add('slow', 6, 'fit', 60, false)
  add('unloaded', 30, 'fit', 30, false)
  add('loaded', 20, 'meta_train', 30, true)
  add('switching', 10, 'meta_train', 30, true, true)
  add('validation', 3, 'validate', 30, true)
  // Rates that are good while a payload is carried can be too high for the moment it is gripped.
  add('validation-switching', 3, 'validate', 30, true, true)
  add('evaluation', 2, 'evaluate', 30, true)
  add('grip-release', 1, 'evaluate', 30, true, true)
  return list
}

function rounded(value: number): number {
  return Number(value.toFixed(3))
}

import { createRandom } from '../dynamics/random.ts'
import type { Random } from '../dynamics/random.ts'
import type { Payload } from '../dynamics/rigid-body/index.ts'
import { alder7 } from './alder-7.ts'
import { multiSineMotion, pickMotion } from './motion.ts'
import type { Motion } from './motion.ts'
import { recordMotion, restAfter } from './recording.ts'
import type { SimulatedRecording } from './recording.ts'

/** Names under which the first run seeds the demo, and `npm run demo` finds it. */
export const scenario = { arm: alder7.name, model: 'alder-7-base', loss: 'alder-7-payload', robot: 'kiln-cart-loader-1' } as const

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
  readonly use: 'fit' | 'meta_train' | 'validate' | 'evaluate'
  readonly tool: string
  /** What kind of motion, in words. */
  readonly motion: string
  /** Carried all the time, or from grip to release; undefined: the gripper is empty. */
  readonly payload: Payload | undefined
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
    use: DemoRecording['use'],
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
        tool: 'flat gripper',
        motion: isSwitched ? 'grip and release' : kind === 'slow' ? 'slow sines' : 'pick',
        payload,
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

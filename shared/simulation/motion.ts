import type { Random } from '../dynamics/random.ts'
import type { SimulatedArm } from './simulated-arm.ts'

/** Where an arm shall be: position, velocity and acceleration, each of length n. */
export interface JointState {
  readonly position: Float64Array
  readonly velocity: Float64Array
  readonly acceleration: Float64Array
}

/** A desired trajectory, known ahead for all times. */
export interface Motion {
  /** s */
  readonly duration: number
  /** s, rising: when the arm has just come to rest, and stays so for a tenth of a second at least. */
  readonly rests: readonly number[]
  /** Writes the desired state at a time; times outside 0..duration give the nearer end. */
  sample(time: number, into: JointState): void
}

/** An empty joint state of n joints. */
export function createJointState(joints: number): JointState {
  return { position: new Float64Array(joints), velocity: new Float64Array(joints), acceleration: new Float64Array(joints) }
}

/**
 * Every joint swings slowly through the workspace, as a sum of three sines faded in from and out to rest.
 *
 * @param duration  s, at least 4
 * @param pace      scales all frequencies; 1 gives 0.02 to 0.09 Hz
 */
export function multiSineMotion(arm: SimulatedArm, random: Random, duration: number, pace = 1): Motion {
  const { middle, halfWidth } = arm.workspace
  const joints = middle.map((center, j) => {
    const waves = [0, 1, 2].map(() => ({
      amplitude: 0.5 + random.uniform(),
      rate: 2 * Math.PI * pace * (0.02 + 0.07 * random.uniform()),
      phase: 2 * Math.PI * random.uniform(),
    }))
    const scale = halfWidth[j] / waves.reduce((sum, wave) => sum + wave.amplitude, 0)
    return { center, waves: waves.map((wave) => ({ ...wave, amplitude: wave.amplitude * scale })) }
  })
  const fade = Math.min(2, duration / 2)
  return {
    duration,
    rests: [duration],
    sample(time, { position, velocity, acceleration }) {
      const t = Math.min(Math.max(time, 0), duration)
      const isLeaving = t > duration / 2
      const u = Math.min(1, (isLeaving ? duration - t : t) / fade)
      // Quintic from 0 to 1 with no velocity and acceleration at both ends, and its derivatives in time.
      const f = u * u * u * (10 - 15 * u + 6 * u * u)
      const fd = (u < 1 ? (30 * u * u * (1 - u) * (1 - u)) / fade : 0) * (isLeaving ? -1 : 1)
      const fdd = u < 1 ? (60 * u * (1 - u) * (1 - 2 * u)) / (fade * fade) : 0
      joints.forEach(({ center, waves }, j) => {
        let [s, sd, sdd] = [0, 0, 0]
        for (const { amplitude, rate, phase } of waves) {
          const sine = amplitude * Math.sin(rate * t + phase)
          s += sine
          sd += amplitude * rate * Math.cos(rate * t + phase)
          sdd -= rate * rate * sine
        }
        position[j] = center + f * s
        velocity[j] = f * sd + fd * s
        acceleration[j] = f * sdd + 2 * fd * sd + fdd * s
      })
    },
  }
}

interface Leg {
  start: number
  travel: number
  from: readonly number[]
  to: readonly number[]
}

/**
 * Quick moves from pose to pose with short rests, as picking shaped clay from a table and setting it on a kiln cart asks for:
 * every second pose is at the table (waist turned one way), every second at the cart, with lifts between.
 *
 * @param duration  s
 * @param vigour    1: peaks near 0.8 of the velocity limits and 4 rad/s²
 */
export function pickMotion(arm: SimulatedArm, random: Random, duration: number, vigour = 1): Motion {
  const { middle, halfWidth } = arm.workspace
  const legs: Leg[] = []
  const pose = (side: number): number[] =>
    middle.map((center, j) => {
      if (j === 0 && side !== 0) return center + side * halfWidth[0] * (0.3 + 0.7 * random.uniform())
      return center + halfWidth[j] * (2 * random.uniform() - 1)
    })
  let end = 0.2
  let from: readonly number[] = [...middle]
  for (let leg = 0; end < duration; leg++) {
    const to = pose([-1, 0, 1, 0][leg % 4])
    const pace = vigour * (0.7 + 0.3 * random.uniform())
    // Peaks of the quintic: 1.875 d/T and 5.774 d/T².
    const travel = to.reduce((longest, target, j) => {
      const distance = Math.abs(target - from[j])
      return Math.max(
        longest,
        (1.875 * distance) / (0.8 * pace * arm.limits[j].velocity),
        Math.sqrt((5.774 * distance) / (4 * pace)),
      )
    }, 0.3)
    legs.push({ start: end, travel, from, to })
    end += travel + 0.1 + 0.15 * random.uniform()
    from = to
  }
  let current = 0
  return {
    duration,
    rests: legs.map(({ start, travel }) => start + travel).filter((time) => time < duration),
    sample(time, { position, velocity, acceleration }) {
      const t = Math.min(Math.max(time, 0), duration)
      if (t < legs[current].start) current = 0
      while (current + 1 < legs.length && t >= legs[current + 1].start) current++
      const { start, travel, from: a, to: b } = legs[current]
      const u = Math.min(Math.max((t - start) / travel, 0), 1)
      const f = u * u * u * (10 - 15 * u + 6 * u * u)
      const fd = (30 * u * u * (1 - u) * (1 - u)) / travel
      const fdd = (60 * u * (1 - u) * (1 - 2 * u)) / (travel * travel)
      for (let j = 0; j < a.length; j++) {
        const distance = b[j] - a[j]
        position[j] = a[j] + f * distance
        velocity[j] = fd * distance
        acceleration[j] = fdd * distance
      }
    },
  }
}

import type { Payload } from '../dynamics/rigid-body/index.ts'
import { createCell, nominalTorque } from './cell.ts'
import type { Motion } from './motion.ts'
import type { SimulatedArm } from './simulated-arm.ts'

/** A logged motion of n joints; matrices rows × n, row-major, SI units. */
export interface SimulatedRecording {
  readonly jointNames: readonly string[]
  readonly time: Float64Array
  readonly position: Float64Array
  readonly velocity: Float64Array
  readonly acceleration: Float64Array
  readonly torque: Float64Array
}

export interface RecordOptions {
  readonly seed: number
  /** Hz, default 50. */
  readonly rate?: number
  readonly payload?: Payload
  /** s: gripped and released at the first rest after; left out: carried all the time. */
  readonly gripAfter?: number
  readonly releaseAfter?: number
}

/**
 * Lets the arm track a motion by its own controller, and logs it. The first row's time is 0.
 *
 * @param motion  its whole duration is recorded, less the logger's window
 */
export function recordMotion(
  arm: SimulatedArm,
  motion: Motion,
  { seed, rate = 50, payload, gripAfter, releaseAfter }: RecordOptions,
): SimulatedRecording {
  const n = arm.limits.length
  const cell = createCell({ arm, motion, source: nominalTorque(arm), seed, logRate: rate })
  const gripAt = payload === undefined ? Infinity : gripAfter === undefined ? 0 : restAfter(motion, gripAfter)
  const releaseAt = releaseAfter === undefined ? Infinity : restAfter(motion, releaseAfter)
  const time: number[] = []
  const logged: [number[], number[], number[], number[]] = [[], [], [], []]
  let [isGripped, isReleased] = [false, false]
  while (cell.now < motion.duration) {
    if (!isGripped && cell.now >= gripAt) {
      cell.grip(payload!)
      isGripped = true
    }
    if (isGripped && !isReleased && cell.now >= releaseAt) {
      cell.release()
      isReleased = true
    }
    const row = cell.cycle()
    if (row === undefined) continue
    time.push(row.time)
    ;[row.position, row.velocity, row.acceleration, row.torque].forEach((values, k) => logged[k].push(...values))
  }
  const [position, velocity, acceleration, torque] = logged.map((values) => Float64Array.from(values))
  const jointNames = arm.nominal.joints.map((joint) => joint.name)
  if (torque.length !== time.length * n) throw new Error('rows and times disagree')
  return { jointNames, time: Float64Array.from(time, (value) => value - time[0]), position, velocity, acceleration, torque }
}

/** The first rest at or after a time; the motion's end if there is none. */
export function restAfter(motion: Motion, time: number): number {
  return motion.rests.find((rest) => rest >= time) ?? motion.duration
}

// Decimals that carry what the sensors and the logger's filter leave: 1e-5 rad, 1e-4 rad/s, 1e-3 rad/s², 1e-4 N·m.
const columns = [
  ['position', 'position', 5],
  ['velocity', 'velocity', 4],
  ['acceleration', 'acceleration', 3],
  ['effort', 'torque', 4],
] as const

/**
 * A recording as CSV: time in seconds, then position_<joint> of all joints, velocity_<joint>, acceleration_<joint> and
 * effort_<joint>, as field logs have them.
 */
export function toCsv(recording: SimulatedRecording): string {
  const { jointNames, time } = recording
  const n = jointNames.length
  const header = ['time', ...columns.flatMap(([title]) => jointNames.map((joint) => `${title}_${joint}`))].join(',')
  const lines = Array.from(time, (t, row) => {
    const cells = columns.flatMap(([, quantity, decimals]) =>
      Array.from(recording[quantity].subarray(row * n, (row + 1) * n), (value) => value.toFixed(decimals)),
    )
    return `${t.toFixed(3)},${cells.join(',')}`
  })
  return `${header}\n${lines.join('\n')}\n`
}

import { createRandom } from '../../shared/dynamics/random.ts'
import type { components } from '../../shared/contract/openapi.generated.ts'

type NewArm = components['schemas']['NewArm']

/** An invented two-joint arm for tests: a swivel that feels inertia and friction, a lift that also feels gravity. */
export function twoJointArm(name = 'tinker-2'): NewArm {
  return {
    name,
    joints: [
      {
        name: 'swivel',
        type: 'revolute',
        position_lower: -2.5,
        position_upper: 2.5,
        velocity_limit: 4,
        torque_limit: 60,
        torque_rate_limit: 2000,
      },
      { name: 'lift', type: 'revolute', position_lower: -2, position_upper: 2, velocity_limit: 4, torque_limit: 90 },
    ],
    gravity: [0, 0, -9.81],
    torque: { side: 'link', positive_accelerates: true, controller_adds: [] },
    fallback: 'controlled_stop',
    horizon: 1,
  }
}

export interface TwoJointMotion {
  rows?: number
  /** Hz */
  rate?: number
  /** kg at the tip of the lift, which is 0.5 m long. */
  payload?: number
  seed?: number
}

/** A simulated recording of that arm: sums of sines, plain dynamics of each joint alone, noise. Rows of 9 numbers. */
export function twoJointRows({ rows = 400, rate = 50, payload = 0, seed = 1 }: TwoJointMotion = {}): number[][] {
  const random = createRandom(seed)
  const phases = Array.from({ length: 4 }, () => 6.28 * random.uniform())
  const speeds = Array.from({ length: 4 }, () => 1 + 3 * random.uniform())
  const noise = () => 0.05 * (random.uniform() + random.uniform() - 1)
  const wave = (joint: number, t: number, derivative: number) => {
    let sum = 0
    for (const k of [2 * joint, 2 * joint + 1]) {
      sum += 0.5 * speeds[k] ** derivative * Math.sin(speeds[k] * t + phases[k] + (derivative * Math.PI) / 2)
    }
    return sum
  }
  return Array.from({ length: rows }, (_, row) => {
    const t = row / rate
    const [q, qd, qdd] = [0, 1, 2].map((derivative) => [wave(0, t, derivative), wave(1, t, derivative)])
    const inertia = [1.5 + 0.25 * payload, 0.8 + 0.25 * payload]
    const torque = [
      inertia[0] * qdd[0] + 0.9 * qd[0] + 0.6 * Math.tanh(8 * qd[0]) + noise(),
      inertia[1] * qdd[1] + 0.7 * qd[1] + 0.5 * Math.tanh(8 * qd[1]) + 9.81 * (1 + 0.5 * payload) * Math.cos(q[1]) + noise(),
    ]
    return [t, ...q, ...qd, ...qdd, ...torque]
  })
}

export const twoJointHeader = [
  'time',
  'position_swivel',
  'position_lift',
  'velocity_swivel',
  'velocity_lift',
  'acceleration_swivel',
  'acceleration_lift',
  'torque_swivel',
  'torque_lift',
]

export function csvOf(header: readonly string[], rows: readonly (readonly (number | string)[])[], lineEnd = '\n'): string {
  const cell = (value: number | string) => (typeof value === 'number' ? String(Number(value.toPrecision(8))) : value)
  return [header, ...rows].map((row) => row.map(cell).join(',') + lineEnd).join('')
}

export function twoJointCsv(motion: TwoJointMotion = {}): string {
  return csvOf(twoJointHeader, twoJointRows(motion))
}

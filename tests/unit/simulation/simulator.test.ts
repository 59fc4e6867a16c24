import { describe, expect, it } from 'vitest'
import { createRandom } from '../../../shared/dynamics/random.ts'
import {
  attachPayload,
  createChain,
  frictionTorque,
  gravityTorque,
  inverseDynamics,
  massMatrix,
} from '../../../shared/dynamics/rigid-body/index.ts'
import { alder7 } from '../../../shared/simulation/alder-7.ts'
import { pickMotion } from '../../../shared/simulation/motion.ts'
import { recordMotion, restAfter, toCsv } from '../../../shared/simulation/recording.ts'
import { createSimulator } from '../../../shared/simulation/simulator.ts'

const n = 7
const payload = { mass: 2.5, centerOfMass: [0.02, -0.02, 0.08] as const }

describe('the simulator', () => {
  it('keeps the energy of a frictionless arm without gravity, to the accuracy of its steps', () => {
    const chain = { ...alder7.truth.chain, gravity: [0, 0, 0] as const }
    const none = alder7.truth.friction.map(() => ({ viscous: 0, coulomb: 0, stribeck: 0, stribeckVelocity: 1, smoothing: 1 }))
    const simulator = createSimulator({ ...alder7.truth, chain, friction: none }, alder7.workspace.middle, createRandom(1))
    const model = createChain(chain)
    const matrix = new Float64Array(n * n)
    const energy = (): number => {
      massMatrix(model, simulator.position, matrix)
      let sum = 0
      for (let i = 0; i < n; i++)
        for (let j = 0; j < n; j++) sum += 0.5 * simulator.velocity[i] * matrix[n * i + j] * simulator.velocity[j]
      return sum
    }
    for (let k = 0; k < 100; k++) simulator.step(Float64Array.of(5, 5, 2, 3, 0.1, 0.3, 0.001), 1e-3)
    const start = energy()
    for (let k = 0; k < 300; k++) simulator.step(new Float64Array(n), 1e-3)

    expect(start).toBeGreaterThan(0.05)
    // First-order steps of half a millisecond at speeds near 1 rad/s.
    expect(Math.abs(energy() / start - 1)).toBeLessThan(5e-3)
  })

  it('stays where friction holds it, and creeps nowhere near rest', () => {
    const simulator = createSimulator(alder7.truth, alder7.workspace.middle, createRandom(1))
    const hold = new Float64Array(n)
    gravityTorque(createChain(alder7.truth.chain), simulator.position, hold)
    const start = simulator.position.slice()
    hold[0] += 1
    for (let k = 0; k < 1000; k++) simulator.step(hold, 1e-3)

    // 1 N·m against 2.4 N·m of Coulomb friction, smoothed over 0.02 rad/s, leaves a creep below 0.01 rad/s.
    simulator.position.forEach((value, j) => expect(Math.abs(value - start[j])).toBeLessThan(0.01))
  })

  it('feels a payload from grip to release only', () => {
    const simulator = createSimulator(alder7.truth, alder7.workspace.middle, createRandom(1))
    const hold = new Float64Array(n)
    gravityTorque(createChain(alder7.truth.chain), simulator.position, hold)
    simulator.grip(payload)
    for (let k = 0; k < 100; k++) simulator.step(hold, 1e-3)
    const falling = simulator.velocity[3]
    simulator.release()
    for (let k = 0; k < 2000; k++) simulator.step(hold, 1e-3)

    expect(falling).toBeGreaterThan(0.1)
    expect(Math.abs(simulator.velocity[3])).toBeLessThan(falling)
  })
})

describe('a recording', () => {
  const motion = pickMotion(alder7, createRandom(5), 12)

  it('logs torques that the true dynamics explain, but for the noise of the sensors', () => {
    const { time, position, velocity, acceleration, torque } = recordMotion(alder7, motion, { seed: 3, payload })
    const chain = createChain(alder7.truth.chain)
    attachPayload(chain, payload)
    const squares = new Float64Array(n)
    const [tau, friction] = [new Float64Array(n), new Float64Array(n)]
    for (let row = 0; row < time.length; row++) {
      const of = (matrix: Float64Array): Float64Array => matrix.subarray(row * n, (row + 1) * n)
      inverseDynamics(chain, of(position), of(velocity), of(acceleration), tau)
      frictionTorque(alder7.truth.friction, of(velocity), friction)
      for (let j = 0; j < n; j++) squares[j] += (of(torque)[j] - tau[j] - friction[j]) ** 2 / time.length
    }

    // The logger's parabola over 61 readings leaves 0.19 of the sensor's noise; as much again for what it smooths away.
    squares.forEach((square, j) => expect(Math.sqrt(square) / alder7.truth.torqueNoise[j]).toBeLessThan(0.38))
  })

  it('is the same for the same seed, and differs in noise for another', () => {
    const [first, again, other] = [3, 3, 4].map((seed) => toCsv(recordMotion(alder7, motion, { seed })))

    expect(again).toBe(first)
    expect(other).not.toBe(first)
  })

  it('has the columns of a field recording, at 50 Hz from time zero', () => {
    const lines = toCsv(recordMotion(alder7, motion, { seed: 3 })).split('\n')
    const header = lines[0].split(',')

    expect(header).toHaveLength(1 + 4 * n)
    expect([header[0], header[1], header[8], header[15], header[22]]).toEqual([
      'time',
      'position_alder_waist',
      'velocity_alder_waist',
      'acceleration_alder_waist',
      'effort_alder_waist',
    ])
    expect(lines[1].split(',')[0]).toBe('0.000')
    expect(lines[2].split(',')[0]).toBe('0.020')
    expect(lines.at(-1)).toBe('')
  })

  it('shows grip and release at rests, as a step of shoulder torque up and back down', () => {
    const load = { ...payload, mass: 3 }
    const held = recordMotion(alder7, motion, { seed: 3, payload: load, gripAfter: 4, releaseAfter: 8 })
    const without = recordMotion(alder7, motion, { seed: 3 })
    const [grip, release] = [restAfter(motion, 4), restAfter(motion, 8)]
    const difference = (from: number, to: number): number => {
      const rows = [...held.time.keys()].filter((row) => held.time[row] > from && held.time[row] < to)
      return rows.reduce((sum, row) => sum + Math.abs(held.torque[row * n + 1] - without.torque[row * n + 1]), 0) / rows.length
    }

    expect(difference(0, grip - 0.1)).toBe(0)
    expect(difference(grip + 0.5, release - 0.1)).toBeGreaterThan(8)
    expect(difference(release + 0.5, 12)).toBeLessThan(1)
  })
})

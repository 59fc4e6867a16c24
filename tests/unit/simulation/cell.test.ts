import { describe, expect, it } from 'vitest'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { createChain, frictionTorque, inverseDynamics } from '../../../shared/dynamics/rigid-body/index.ts'
import { alder7 } from '../../../shared/simulation/alder-7.ts'
import { CYCLE, createCell, nominalTorque, predictedTorque } from '../../../shared/simulation/cell.ts'
import type { Cell, TorqueSource } from '../../../shared/simulation/cell.ts'
import { createController } from '../../../shared/simulation/controller.ts'
import { createFeedForward } from '../../../shared/simulation/feed-forward.ts'
import { createLogger } from '../../../shared/simulation/logger.ts'
import { createJointState, pickMotion } from '../../../shared/simulation/motion.ts'
import type { Motion } from '../../../shared/simulation/motion.ts'

const n = 7

/** Feed-forward with the true dynamics and friction: what a perfect model would give. */
function trueTorque(): TorqueSource {
  const chain = createChain(alder7.truth.chain)
  const friction = new Float64Array(n)
  return {
    next(desired, _time, _now, out) {
      inverseDynamics(chain, desired.position, desired.velocity, desired.acceleration, out)
      frictionTorque(alder7.truth.friction, desired.velocity, friction)
      for (let j = 0; j < n; j++) out[j] += friction[j]
      return 'local'
    },
  }
}

function trackingError(source: TorqueSource, motion: Motion): number {
  const cell = createCell({ arm: alder7, motion, source, seed: 1, logRate: 50 })
  let sum = 0
  while (cell.now < motion.duration) {
    cell.cycle()
    for (let j = 0; j < n; j++) sum += (cell.desired.position[j] - cell.position[j]) ** 2
  }
  return Math.sqrt(sum / n / (motion.duration / CYCLE))
}

describe('a cell', () => {
  it('tracks far better the better its feed-forward', () => {
    const motion = pickMotion(alder7, createRandom(2), 6)
    const [nominal, perfect] = [trackingError(nominalTorque(alder7), motion), trackingError(trueTorque(), motion)]

    expect(nominal).toBeLessThan(0.03)
    expect(perfect).toBeLessThan(nominal / 3)
  })

  it("logs position and torque of the same moment, lagging by half the logger's window", () => {
    const motion = pickMotion(alder7, createRandom(2), 4)
    const cell = createCell({ arm: alder7, motion, source: nominalTorque(alder7), seed: 1, logRate: 50 })
    const truth: Float64Array[] = []
    let rows = 0
    while (cell.now < 4) {
      truth.push(cell.position.slice())
      const row = cell.cycle()
      if (row === undefined) continue
      rows++
      const actual = truth[Math.round(row.time / CYCLE)]
      expect(cell.now - row.time).toBeCloseTo(0.031, 9)
      row.position.forEach((value, j) => expect(Math.abs(value - actual[j])).toBeLessThan(1e-3))
    }
    expect(rows).toBe(197)
  })

  it('slows down along its path and stands when predictions stop for long, and goes on when they are back', () => {
    const motion = pickMotion(alder7, createRandom(2), 10)
    const feedForward = createFeedForward({
      joints: n,
      rampRate: alder7.limits.map((limit) => limit.torqueRate),
      holdCycles: 5,
      localSeconds: 0.5,
      returnCycles: 50,
    })
    const cell = createCell({ arm: alder7, motion, source: predictedTorque(alder7, feedForward), seed: 1, logRate: 50 })
    hand(0, 1)
    runUntil(cell, 3)
    const stoppedAt = cell.motionTime
    const standing = Math.max(...cell.desired.velocity.map(Math.abs))
    runUntil(cell, 3.5)
    const stillAt = cell.motionTime
    hand(stillAt, 6)
    runUntil(cell, 4.5)

    expect(stoppedAt).toBeGreaterThan(1.5)
    expect(stoppedAt).toBeLessThan(1.8)
    expect(standing).toBe(0)
    expect(stillAt).toBe(stoppedAt)
    expect(cell.source).toBe('horizon')
    expect(cell.motionTime - stillAt).toBeGreaterThan(0.7)

    function hand(from: number, to: number): void {
      const time = Float64Array.from({ length: Math.round((to - from) * 50) + 1 }, (_, k) => from + k * 0.02)
      const [torque, desired, one, source] = [
        new Float64Array(time.length * n),
        createJointState(n),
        new Float64Array(n),
        trueTorque(),
      ]
      time.forEach((t, row) => {
        motion.sample(t, desired)
        source.next(desired, t, t, one)
        torque.set(one, row * n)
      })
      feedForward.accept({ time, torque, expires: Infinity }, cell.motionTime, cell.now)
    }
  })
})

describe('the controller', () => {
  it('saturates at the torque limits, and limits the rate of what is left', () => {
    const controller = createController(alder7, CYCLE)
    const desired = createJointState(n)
    desired.position.set(alder7.workspace.middle)
    const torque = new Float64Array(n)
    controller.cycle(desired, desired.position, new Float64Array(n), torque)
    expect([...torque]).toEqual(Array(n).fill(0))

    controller.cycle(desired, desired.position, new Float64Array(n).fill(1000), torque)
    expect([...torque]).toEqual(alder7.limits.map((limit) => limit.torqueRate * CYCLE))

    for (let k = 0; k < 300; k++) controller.cycle(desired, desired.position, new Float64Array(n).fill(1000), torque)
    expect([...torque]).toEqual(alder7.limits.map((limit) => limit.torque))
  })

  it('drops a feed-forward that is not finite as a whole', () => {
    const controller = createController(alder7, CYCLE)
    const desired = createJointState(n)
    desired.position.set(alder7.workspace.middle)
    const torque = new Float64Array(n)
    controller.cycle(desired, desired.position, Float64Array.of(5, NaN, 5, 5, 5, 5, 5), torque)

    expect([...torque]).toEqual(Array(n).fill(0))
  })
})

describe('the logger', () => {
  it('gives position, velocity and acceleration of a parabola exactly, at the middle of its window', () => {
    const logger = createLogger({ joints: 1, cycle: 0.001, rate: 100, window: 0.04 })
    const of = (t: number): number => 0.3 + 0.7 * t - 2.5 * t * t
    const rows = Array.from({ length: 200 }, (_, k) =>
      logger.push(k * 0.001, Float64Array.of(of(k * 0.001)), Float64Array.of(4)),
    ).filter((row) => row !== undefined)

    expect(rows).toHaveLength(16)
    for (const { time, position, velocity, acceleration, torque } of rows) {
      expect(position[0]).toBeCloseTo(of(time), 12)
      expect(velocity[0]).toBeCloseTo(0.7 - 5 * time, 10)
      // Differences of a thousandth of a second, twice: 1e-16 grows by 1e6 over the window's length.
      expect(acceleration[0]).toBeCloseTo(-5, 7)
      expect(torque[0]).toBeCloseTo(4, 12)
    }
  })

  it('refuses a rate that does not divide the cycle rate', () => {
    expect(() => createLogger({ joints: 1, cycle: 0.001, rate: 60 })).toThrow(/60 Hz does not divide/)
  })
})

function runUntil(cell: Cell, time: number): void {
  while (cell.now < time) cell.cycle()
}

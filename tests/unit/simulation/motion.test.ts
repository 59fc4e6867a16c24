import { describe, expect, it } from 'vitest'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { alder7 } from '../../../shared/simulation/alder-7.ts'
import { createJointState, multiSineMotion, pickMotion } from '../../../shared/simulation/motion.ts'

const makers = [
  ['multi-sine', multiSineMotion],
  ['pick', pickMotion],
] as const

for (const [name, make] of makers) {
  describe(`a ${name} motion`, () => {
    const motion = make(alder7, createRandom(11), 20)
    const [state, before, after] = [createJointState(7), createJointState(7), createJointState(7)]

    it('has velocity and acceleration that are the derivatives of its position', () => {
      const h = 1e-4
      for (let t = 0.5; t < 19.5; t += 0.0937) {
        motion.sample(t - h, before)
        motion.sample(t + h, after)
        motion.sample(t, state)
        for (let j = 0; j < 7; j++) {
          // Central differences err by h²/6 of a third derivative; at the joints of two quintics the acceleration has a kink.
          expect(Math.abs((after.position[j] - before.position[j]) / (2 * h) - state.velocity[j])).toBeLessThan(1e-5)
          expect(Math.abs((after.velocity[j] - before.velocity[j]) / (2 * h) - state.acceleration[j])).toBeLessThan(1e-2)
        }
      }
    })

    it('stays inside position and velocity limits', () => {
      for (let t = 0; t <= 20; t += 0.01) {
        motion.sample(t, state)
        alder7.limits.forEach(({ lower, upper, velocity }, j) => {
          expect(state.position[j]).toBeGreaterThan(lower)
          expect(state.position[j]).toBeLessThan(upper)
          expect(Math.abs(state.velocity[j])).toBeLessThan(velocity)
        })
      }
    })

    it('is the same for the same seed and another for another', () => {
      const [same, other] = [make(alder7, createRandom(11), 20), make(alder7, createRandom(12), 20)]
      motion.sample(7, state)
      same.sample(7, before)
      other.sample(7, after)

      expect(before.position).toEqual(state.position)
      expect(after.position).not.toEqual(state.position)
    })
  })
}

it('a pick motion reaches accelerations above 3 rad/s², and stands still at its rests', () => {
  const motion = pickMotion(alder7, createRandom(11), 30)
  const state = createJointState(7)
  let peak = 0
  for (let t = 0; t <= 30; t += 0.01) {
    motion.sample(t, state)
    peak = Math.max(peak, ...state.acceleration.map(Math.abs))
  }

  expect(peak).toBeGreaterThan(3)
  expect(motion.rests.length).toBeGreaterThan(10)
  for (const rest of motion.rests) {
    motion.sample(rest + 0.05, state)
    expect(state.velocity.every((value) => value === 0)).toBe(true)
  }
})

import { expect, test } from 'vitest'
import { defaultFitOptions, fitNetwork, type FitEpoch } from '../../../server/jobs/training/fit-network.ts'
import type { Motion } from '../../../shared/dynamics/motion.ts'
import { createRandom } from '../../../shared/dynamics/random.ts'

const joints = 2

/** Simulated: gravity, inertia and friction that changes sign within hundredths of a rad/s, with a little noise. */
function createMotion(seed: number, rows = 600): Motion {
  const random = createRandom(seed)
  const states = new Float64Array(rows * 3 * joints)
  const torque = new Float64Array(rows * joints)
  for (let joint = 0; joint < joints; joint++) {
    const [phase, rate] = [6 * random.uniform(), 0.5 + random.uniform()]
    for (let row = 0; row < rows; row++) {
      const angle = phase + rate * 0.02 * row
      const at = row * 3 * joints + joint
      states[at] = Math.sin(angle)
      states[at + joints] = rate * Math.cos(angle)
      states[at + 2 * joints] = -rate * rate * Math.sin(angle)
      torque[row * joints + joint] = 5 * Math.sin(states[at]) + 0.5 * states[at + 2 * joints]
        + 3 * Math.tanh(states[at + joints] / 0.02) + 0.02 * random.normal()
    }
  }
  return { name: `motion ${seed}`, rows, time: Float64Array.from({ length: rows }, (_, row) => 0.02 * row), states, torque }
}

const training = [1, 2, 3, 4, 5].map(seed => createMotion(seed))
const heldOut = [createMotion(11), createMotion(12)]
const options = { ...defaultFitOptions, joints, hidden: [16, 16], epochs: 15, rowsPerStep: 64 }

test('a fit predicts motions it has not seen, friction included', async () => {
  const { version, metrics, curve } = await fitNetwork(training, heldOut, options)

  // A tenth of the torque's variance: friction alone is 9 of about 20.
  expect(metrics.heldOutError).toBeLessThan(0.1)
  expect(metrics.motions.map(({ name }) => name)).toEqual(['motion 11', 'motion 12'])
  expect(curve.length).toBe(15)
  expect(curve.at(-1)!.heldOutError).toBeCloseTo(metrics.heldOutError, 5)
  expect(version.description.network).toEqual({ sizes: [6, 16, 16, 2], activation: 'relu' })
  expect(version.parameters.every(Number.isFinite)).toBe(true)
  // 0.02 N·m of noise against a spread of some N·m.
  for (const noise of version.description.noise) expect(noise).toBeLessThan(0.1)
})

test('the root mean square error is in N·m', async () => {
  const inMillinewtonmetres = (motion: Motion): Motion => ({ ...motion, torque: motion.torque.map(value => 1000 * value) })
  const short = { ...options, epochs: 3 }

  const plain = await fitNetwork(training, heldOut, short)
  const scaled = await fitNetwork(training.map(inMillinewtonmetres), heldOut.map(inMillinewtonmetres), short)

  for (let joint = 0; joint < joints; joint++) {
    expect(scaled.metrics.rmse[joint] / plain.metrics.rmse[joint]).toBeCloseTo(1000, -1)
  }
})

test('the same seed gives the same parameters to the bit, another seed others', async () => {
  const parameters = async (seed: number) => {
    const { version } = await fitNetwork(training, heldOut, { ...options, epochs: 2, seed })
    return version.parameters
  }

  const first = await parameters(3)

  expect(await parameters(3)).toEqual(first)
  expect(await parameters(4)).not.toEqual(first)
})

test('a fit reports every epoch and stops when it is cancelled, with the reason', async () => {
  const cancel = new AbortController()
  const seen: FitEpoch[] = []
  const fit = fitNetwork(training, heldOut, {
    ...options,
    signal: cancel.signal,
    onEpoch(epoch) {
      seen.push(epoch)
      if (epoch.epoch === 2) cancel.abort(new Error('cancelled by the engineer'))
    },
  })

  await expect(fit).rejects.toThrow('cancelled by the engineer')
  expect(seen.map(({ epoch }) => epoch)).toEqual([1, 2])
})

test('without a recording to measure on there is no fit', async () => {
  await expect(fitNetwork(training, [], options)).rejects.toThrow('0 held out')
})

import { expect, test } from 'vitest'
import { plantFrictionUnits } from '../../../server/jobs/training/friction-units.ts'
import { createNetworkPass, forward, parameterCount, type NetworkShape } from '../../../shared/dynamics/network.ts'

const joints = 2

function predict(network: NetworkShape, parameters: Float64Array, velocity: number[]): number[] {
  const y = new Float64Array(joints)
  forward(createNetworkPass(network, 1), parameters, Float64Array.of(0.7, -0.7, ...velocity, 0.3, 0.3), 1, y)
  return [...y]
}

test('each joint steps from −½ to ½ at its own zero velocity, and at no other', () => {
  const network: NetworkShape = { sizes: [6, 12, 8, joints], activation: 'relu' }
  const parameters = new Float64Array(parameterCount(network))

  plantFrictionUnits(network, parameters, [0, 0.5])

  const close = (found: number[], wanted: number[]) => found.forEach((value, k) => expect(value).toBeCloseTo(wanted[k], 12))
  close(predict(network, parameters, [-0.2, 0.3]), [-0.5, -0.5])
  close(predict(network, parameters, [0, 0.5]), [0, 0])
  close(predict(network, parameters, [-0.2, 3]), [-0.5, 0.5])
  close(predict(network, parameters, [0.05, 0.45]), [0.25, -0.25])
})

test.each<NetworkShape>([
  { sizes: [6, 12, 8, joints], activation: 'tanh' },
  { sizes: [6, 7, 8, joints], activation: 'relu' },
  { sizes: [6, 12, joints], activation: 'relu' },
])('a network without room for them is left as it is: $sizes, $activation', (network) => {
  const parameters = new Float64Array(parameterCount(network)).fill(0.1)

  plantFrictionUnits(network, parameters, [0, 0])

  expect(parameters.every(value => value === 0.1)).toBe(true)
})

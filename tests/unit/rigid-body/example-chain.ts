import { createRandom } from '../../../shared/dynamics/random.ts'
import type { Random } from '../../../shared/dynamics/random.ts'
import { rotationFromRollPitchYaw } from '../../../shared/dynamics/rigid-body/index.ts'
import type { ChainDescription, JointKind } from '../../../shared/dynamics/rigid-body/index.ts'

/** Six joints of every kind, with axes, offsets and inertias in no special direction. */
export function exampleChain(seed = 1): ChainDescription {
  const random = createRandom(seed)
  const kinds: JointKind[] = ['revolute', 'continuous', 'prismatic', 'revolute', 'prismatic', 'revolute']
  return {
    joints: kinds.map((kind, i) => ({
      name: `joint_${i + 1}`,
      kind,
      offset: { position: triple(random, 0.3), rotation: rotationFromRollPitchYaw(...triple(random, 3)) },
      axis: triple(random, 1),
      inertial: {
        mass: 1 + random.uniform(),
        centerOfMass: triple(random, 0.1),
        inertia: [0.05, 0.004 * random.uniform(), -0.003, 0.04, 0.005 * random.uniform(), 0.03],
      },
    })),
    gravity: [1, -2, -9],
    flange: { position: [0.02, -0.01, 0.08], rotation: rotationFromRollPitchYaw(0.3, -0.5, 1.1) },
  }
}

export function triple(random: Random, size: number): [number, number, number] {
  return [size * (2 * random.uniform() - 1), size * (2 * random.uniform() - 1), size * (2 * random.uniform() - 1)]
}

export function vector(random: Random, length: number, size: number): Float64Array {
  return Float64Array.from({ length }, () => size * (2 * random.uniform() - 1))
}

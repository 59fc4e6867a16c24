import { createHash } from 'node:crypto'
import { lossToWire, versionToWire } from '../../shared/contract/snapshots.ts'
import { lossKinds } from '../../shared/dynamics/losses/index.ts'
import { encodeLossVersion, type LossVersion } from '../../shared/dynamics/loss-version.ts'
import { initialParameters } from '../../shared/dynamics/network.ts'
import { createRandom } from '../../shared/dynamics/random.ts'
import { encodeVersion, type Version } from '../../shared/dynamics/version.ts'
import type { components } from '../../shared/contract/openapi.generated.ts'

type Schemas = components['schemas']

const sha256 = (bytes: Uint8Array) => createHash('sha256').update(bytes).digest('hex')

/** A small version that has learned nothing, for an arm of two joints; each seed another one. */
export function smallVersion(seed = 1, joints = 2): Version {
  const channels = 3 * joints
  const network = { sizes: [channels, 8, joints], activation: 'relu' as const }
  const random = createRandom(seed)
  const identity = Array.from({ length: channels }, (_, i) => Array.from({ length: i + 1 }, (_, j) => (i === j ? 1 : 0))).flat()
  const all = (length: number, value: number) => new Array<number>(length).fill(value)
  return {
    description: {
      joints,
      network,
      normalisation: {
        inputMean: all(channels, 0),
        inputStd: all(channels, 1),
        outputMean: all(joints, 0),
        outputStd: all(joints, 5),
      },
      coverage: { low: all(channels, -3), high: all(channels, 3), mean: all(channels, 0), whitening: identity, d99: 5 },
      noise: all(joints, 0.01),
      referenceStates: [all(channels, 0), all(channels, 0.5)],
    },
    parameters: Float32Array.from(initialParameters(network, random)),
  }
}

export function versionSnapshot(version: Version, jointNames: string[]): Schemas['VersionSnapshot'] {
  return {
    format: 'heftwise-version-1',
    model: 'elsewhere',
    version: 1,
    joint_names: jointNames,
    unit: jointNames.map(() => 'N·m' as const),
    torque_limits: jointNames.map(() => 50),
    ...versionToWire(version),
    checksum: sha256(encodeVersion(version)),
    metrics: null,
  }
}

/** A state-dependent loss close to plain squared error, for the version with that checksum. */
export function smallLoss(baseChecksum: string, joints = 2): LossVersion {
  const shape = { joints, inputs: 3 * joints, hidden: 4, positive: 'exp' as const }
  return {
    description: {
      kind: 'state_dependent',
      positive: 'exp',
      joints,
      hidden: 4,
      baseChecksum,
      scheme: 'all',
      update: { kind: 'sgd', rate: 0.02, rowsPerStep: 4, fade: 1 },
    },
    parameters: Float32Array.from(lossKinds.state_dependent.initialParameters(shape, createRandom(3))),
  }
}

export function lossSnapshot(loss: LossVersion): Schemas['LossSnapshot'] {
  return { format: 'heftwise-loss-1', ...lossToWire(loss), checksum: sha256(encodeLossVersion(loss)), validation: [] }
}

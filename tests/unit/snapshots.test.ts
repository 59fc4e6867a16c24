import { describe, expect, it } from 'vitest'
import {
  floatsFromBase64,
  floatsToBase64,
  lossFromWire,
  lossToWire,
  versionFromWire,
  versionToWire,
} from '../../shared/contract/snapshots.ts'
import { lossKinds } from '../../shared/dynamics/losses/index.ts'
import type { LossVersion } from '../../shared/dynamics/loss-version.ts'
import { encodeLossVersion } from '../../shared/dynamics/loss-version.ts'
import { parameterCount } from '../../shared/dynamics/network.ts'
import { createRandom } from '../../shared/dynamics/random.ts'
import { encodeVersion, type Version } from '../../shared/dynamics/version.ts'

const joints = 2
const channels = 3 * joints
const random = createRandom(7)
const list = (length: number) => Array.from({ length }, () => 0.1 + random.uniform())

function someVersion(): Version {
  const network = { sizes: [channels, 5, joints], activation: 'relu' as const }
  return {
    description: {
      joints,
      network,
      normalisation: { inputMean: list(channels), inputStd: list(channels), outputMean: list(joints), outputStd: list(joints) },
      coverage: {
        low: list(channels),
        high: list(channels),
        mean: list(channels),
        whitening: list((channels * (channels + 1)) / 2),
        d99: 4.2,
      },
      noise: list(joints),
      referenceStates: [list(channels), list(channels)],
    },
    parameters: Float32Array.from(list(parameterCount(network))),
  }
}

function someLoss(): LossVersion {
  const shape = { joints, inputs: channels, hidden: 4, positive: 'exp' as const }
  return {
    description: {
      kind: 'state_dependent',
      positive: 'exp',
      joints,
      hidden: 4,
      baseChecksum: 'ab'.repeat(32),
      scheme: 'all',
      update: { kind: 'sgd', rate: 0.0123456789, rowsPerStep: 4, fade: 1 },
    },
    parameters: Float32Array.from(list(lossKinds.state_dependent.parameterCount(shape))),
  }
}

describe('snapshots', () => {
  it('give back a version to the byte after a trip through JSON', () => {
    const version = someVersion()

    const wire = JSON.parse(JSON.stringify(versionToWire(version)))

    expect(encodeVersion(versionFromWire(wire.description, wire.parameters))).toEqual(encodeVersion(version))
  })

  it('give back a loss version to the byte after a trip through JSON', () => {
    const loss = someLoss()

    const wire = JSON.parse(JSON.stringify(lossToWire(loss)))

    expect(encodeLossVersion(lossFromWire(wire))).toEqual(encodeLossVersion(loss))
  })

  it('write binary32 as RFC 4648 base64, little endian', () => {
    // 1 is 0x3f800000 in IEEE 754 binary32.
    expect(floatsToBase64(Float32Array.of(1))).toBe(Buffer.from([0, 0, 0x80, 0x3f]).toString('base64'))
    expect(floatsFromBase64('p', 'AACAPw==')).toEqual(Float32Array.of(1))
  })

  it.each([
    ['a missing part', (d: Record<string, unknown>) => delete d.noise, /description\.noise is missing/],
    ['an unknown part', (d: Record<string, unknown>) => (d.colour = 1), /description\.colour is not a part/],
    [
      'a part of another type',
      (d: Record<string, unknown>) => (d.coverage = 'wide'),
      /description\.coverage is missing or no object/,
    ],
    ['a list that is too short', (d: Record<string, unknown>) => (d.noise as number[]).pop(), /noise has 1/],
    ['null in a list', (d: Record<string, unknown>) => ((d.noise as unknown[])[0] = null), /noise: value 0 is null/],
    ['text in a list', (d: Record<string, unknown>) => ((d.noise as unknown[])[0] = '1'), /noise: value 0 is 1/],
    [
      'sizes that are no list',
      (d: Record<string, unknown>) => ((d.network as Record<string, unknown>).sizes = 6),
      /sizes is no list/,
    ],
  ])('refuse %s by name', (_, spoil, message) => {
    const { description, parameters } = JSON.parse(JSON.stringify(versionToWire(someVersion())))

    spoil(description)

    expect(() => versionFromWire(description, parameters)).toThrow(message)
  })

  it('refuse parameters that are not base64, cut short, or not finite', () => {
    const { description, parameters } = versionToWire(someVersion())

    expect(() => versionFromWire(description, '%%%')).toThrow(/not base64/)
    expect(() => versionFromWire(description, parameters.slice(0, -8))).toThrow(/parameters has/)
    const nan = floatsToBase64(Float32Array.from(floatsFromBase64('p', parameters), (value, k) => (k === 3 ? NaN : value)))
    expect(() => versionFromWire(description, nan)).toThrow(/value 3 is NaN/)
  })

  it('refuse a loss without the rate it was learned with', () => {
    const wire = lossToWire(someLoss())

    expect(() => lossFromWire({ ...wire, update: { kind: 'sgd' } })).toThrow(/update\.rate is missing/)
  })
})

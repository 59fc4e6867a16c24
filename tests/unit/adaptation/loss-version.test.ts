import { describe, expect, test } from 'vitest'
import { createAdaptation, decodeLossVersion, encodeLossVersion, type LossVersion } from '../../../shared/dynamics/index.ts'
import { inputsOf, kernels, lossOf } from './two-joint-arm.ts'

describe('a loss version as bytes', () => {
  test.each(['structured', 'state_dependent', 'unstructured'] as const)('of kind %s comes back equal', kind => {
    const loss = lossOf(kind, 'all')

    expect(decodeLossVersion(encodeLossVersion(loss))).toEqual(loss)
    expect(encodeLossVersion(decodeLossVersion(encodeLossVersion(loss)))).toEqual(encodeLossVersion(loss))
  })

  test('is refused when its parts do not fit, or it is of another kind', () => {
    const loss = lossOf('state_dependent', 'all')
    const altered = (description: Partial<LossVersion['description']>) => ({
      ...loss,
      description: { ...loss.description, ...description },
    })

    expect(() => encodeLossVersion(altered({ hidden: 5 }))).toThrow(/parameters has/)
    expect(() => encodeLossVersion(altered({ kind: 'mse' as never }))).toThrow(/kind is mse/)
    expect(() => encodeLossVersion(altered({ update: { ...loss.description.update, rate: 0 } }))).toThrow(/rate is 0/)
    expect(() => decodeLossVersion(encodeLossVersion(loss).subarray(4))).toThrow(RangeError)
  })

  test('for another number of joints cannot be adapted with', () => {
    const loss = lossOf('structured', 'all')
    const wide = { description: { ...loss.description, joints: 3 }, parameters: Float32Array.of(0, 0, 0) }

    expect(() => createAdaptation(kernels, inputsOf({}, wide))).toThrow(/3 joints/)
  })
})

import type { Loss, LossKind, LossRows, LossShape } from './loss.ts'
import { positiveInverseOfOne, positiveSlope, positiveValue } from './positive.ts'

/**
 * Squared error with one constant weight a joint: the mean over rows and joints of w e², w = pos(a).
 * Parameters: a, one per joint.
 *
 * Source of the reading of w as an inverse noise variance: Nix and Weigend 1994 (from memory).
 */
export const structured: LossKind = {
  name: 'structured',
  parameterCount: ({ joints }) => joints,
  initialParameters: ({ joints, positive }) => new Float64Array(joints).fill(positiveInverseOfOne(positive)),
  create,
}

function create({ joints, positive }: LossShape): Loss {
  const w = new Float64Array(joints)

  function computeWeights(a: Float64Array): void {
    for (let j = 0; j < joints; j++) w[j] = positiveValue(positive, a[j])
  }

  function weightedSum({ rows, measured, predicted }: LossRows): number {
    let sum = 0
    for (let r = 0; r < rows; r++) {
      for (let j = 0; j < joints; j++) {
        const e = measured[r * joints + j] - predicted[r * joints + j]
        sum += w[j] * e * e
      }
    }
    return sum / (rows * joints)
  }

  function value(a: Float64Array, given: LossRows): number {
    computeWeights(a)
    return weightedSum(given)
  }

  function gradient(a: Float64Array, given: LossRows, predictionGradient: Float64Array): number {
    const { rows, measured, predicted } = given
    const scale = -2 / (rows * joints)
    computeWeights(a)
    for (let r = 0; r < rows; r++) {
      for (let j = 0; j < joints; j++) {
        const k = r * joints + j
        predictionGradient[k] = scale * w[j] * (measured[k] - predicted[k])
      }
    }
    return weightedSum(given)
  }

  function addParameterGradient(a: Float64Array, given: LossRows, scale: number, sum: Float64Array): void {
    const { rows, measured, predicted } = given
    const share = scale / (rows * joints)
    for (let j = 0; j < joints; j++) {
      const slope = positiveSlope(positive, a[j])
      for (let r = 0; r < rows; r++) {
        const e = measured[r * joints + j] - predicted[r * joints + j]
        sum[j] += share * slope * e * e
      }
    }
  }

  function secondOrder(
    a: Float64Array,
    { rows, measured, predicted }: LossRows,
    tangent: Float64Array,
    gradientTangent: Float64Array,
    scale: number,
    sum: Float64Array,
  ): void {
    const share = 2 / (rows * joints)
    computeWeights(a)
    for (let j = 0; j < joints; j++) {
      const slope = positiveSlope(positive, a[j])
      for (let r = 0; r < rows; r++) {
        const k = r * joints + j
        gradientTangent[k] = share * w[j] * tangent[k]
        sum[j] -= scale * share * slope * (measured[k] - predicted[k]) * tangent[k]
      }
    }
  }

  function weights(a: Float64Array, _given: LossRows, out: Float64Array): void {
    computeWeights(a)
    for (let j = 0; j < joints; j++) out[j] = w[j]
  }

  return { parameterCount: joints, value, gradient, addParameterGradient, secondOrder, weights }
}

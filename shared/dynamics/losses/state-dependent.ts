import { tanh } from '../elementary.ts'
import type { Random } from '../random.ts'
import type { Loss, LossKind, LossRows, LossShape } from './loss.ts'
import { positiveInverseOfOne, positiveSlope, positiveValue } from './positive.ts'

/**
 * Squared error whose weights depend on the state: the mean over rows and joints of w e²,
 * w = pos(tanh(x V1 + c1) V2 + c2), x the network's normalised input row.
 * Parameters: V1 (inputs × hidden, row-major), c1 (hidden), V2 (hidden × joints), c2 (joints).
 */
export const stateDependent: LossKind = { name: 'state_dependent', parameterCount, initialParameters, create }

function parameterCount({ inputs, joints, hidden }: LossShape): number {
  return (inputs + 1) * hidden + (hidden + 1) * joints
}

/** Glorot-uniform layers, the last one a tenth of that: the weights start close to 1 and vary a little with the state. */
function initialParameters(shape: LossShape, random: Random): Float64Array {
  const { inputs, joints, hidden, positive } = shape
  const parameters = new Float64Array(parameterCount(shape))
  const { v2, c2 } = places(shape)
  const first = Math.sqrt(6 / (inputs + hidden))
  const second = 0.1 * Math.sqrt(6 / (hidden + joints))
  for (let k = 0; k < inputs * hidden; k++) parameters[k] = (2 * random.uniform() - 1) * first
  for (let k = 0; k < hidden * joints; k++) parameters[v2 + k] = (2 * random.uniform() - 1) * second
  parameters.fill(positiveInverseOfOne(positive), c2)
  return parameters
}

function places({ inputs, joints, hidden }: LossShape) {
  const c1 = inputs * hidden
  const v2 = c1 + hidden
  return { c1, v2, c2: v2 + hidden * joints }
}

function create(shape: LossShape, maxRows: number): Loss {
  const { inputs, joints, hidden, positive } = shape
  const { c1, v2, c2 } = places(shape)
  const h = new Float64Array(maxRows * hidden)
  const arguments_ = new Float64Array(maxRows * joints)
  const w = new Float64Array(maxRows * joints)
  const argumentGradient = new Float64Array(joints)

  function computeWeights(phi: Float64Array, { rows, x }: LossRows): void {
    for (let r = 0; r < rows; r++) {
      const hidden0 = r * hidden
      for (let u = 0; u < hidden; u++) h[hidden0 + u] = phi[c1 + u]
      for (let i = 0; i < inputs; i++) {
        const xi = x[r * inputs + i]
        for (let u = 0; u < hidden; u++) h[hidden0 + u] += xi * phi[i * hidden + u]
      }
      for (let u = 0; u < hidden; u++) h[hidden0 + u] = tanh(h[hidden0 + u])
      const row = r * joints
      for (let j = 0; j < joints; j++) arguments_[row + j] = phi[c2 + j]
      for (let u = 0; u < hidden; u++) {
        for (let j = 0; j < joints; j++) arguments_[row + j] += h[hidden0 + u] * phi[v2 + u * joints + j]
      }
      for (let j = 0; j < joints; j++) w[row + j] = positiveValue(positive, arguments_[row + j])
    }
  }

  /** Adds what row r passes on to φ, given ∂/∂(argument of pos) in `argumentGradient`. */
  function addRow(phi: Float64Array, x: Float64Array, r: number, sum: Float64Array): void {
    for (let j = 0; j < joints; j++) sum[c2 + j] += argumentGradient[j]
    for (let u = 0; u < hidden; u++) {
      const hu = h[r * hidden + u]
      let back = 0
      for (let j = 0; j < joints; j++) {
        sum[v2 + u * joints + j] += hu * argumentGradient[j]
        back += phi[v2 + u * joints + j] * argumentGradient[j]
      }
      back *= 1 - hu * hu
      sum[c1 + u] += back
      for (let i = 0; i < inputs; i++) sum[i * hidden + u] += back * x[r * inputs + i]
    }
  }

  function weightedSum({ rows, measured, predicted }: LossRows): number {
    let sum = 0
    for (let k = 0; k < rows * joints; k++) {
      const e = measured[k] - predicted[k]
      sum += w[k] * e * e
    }
    return sum / (rows * joints)
  }

  function value(phi: Float64Array, given: LossRows): number {
    computeWeights(phi, given)
    return weightedSum(given)
  }

  function gradient(phi: Float64Array, given: LossRows, predictionGradient: Float64Array): number {
    const { rows, measured, predicted } = given
    const scale = -2 / (rows * joints)
    computeWeights(phi, given)
    for (let k = 0; k < rows * joints; k++) predictionGradient[k] = scale * w[k] * (measured[k] - predicted[k])
    return weightedSum(given)
  }

  function addParameterGradient(phi: Float64Array, given: LossRows, scale: number, sum: Float64Array): void {
    const { rows, x, measured, predicted } = given
    const share = scale / (rows * joints)
    computeWeights(phi, given)
    for (let r = 0; r < rows; r++) {
      for (let j = 0; j < joints; j++) {
        const k = r * joints + j
        const e = measured[k] - predicted[k]
        argumentGradient[j] = share * e * e * positiveSlope(positive, arguments_[k])
      }
      addRow(phi, x, r, sum)
    }
  }

  function secondOrder(
    phi: Float64Array,
    given: LossRows,
    tangent: Float64Array,
    gradientTangent: Float64Array,
    scale: number,
    sum: Float64Array,
  ): void {
    const { rows, x, measured, predicted } = given
    const share = 2 / (rows * joints)
    computeWeights(phi, given)
    for (let r = 0; r < rows; r++) {
      for (let j = 0; j < joints; j++) {
        const k = r * joints + j
        gradientTangent[k] = share * w[k] * tangent[k]
        const slope = positiveSlope(positive, arguments_[k])
        argumentGradient[j] = -scale * share * slope * (measured[k] - predicted[k]) * tangent[k]
      }
      addRow(phi, x, r, sum)
    }
  }

  function weights(phi: Float64Array, given: LossRows, out: Float64Array): void {
    computeWeights(phi, given)
    for (let j = 0; j < joints; j++) {
      let sum = 0
      for (let r = 0; r < given.rows; r++) sum += w[r * joints + j]
      out[j] = sum / given.rows
    }
  }

  return { parameterCount: parameterCount(shape), value, gradient, addParameterGradient, secondOrder, weights }
}

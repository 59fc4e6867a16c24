import { logistic, softplus, tanh } from '../elementary.ts'
import type { Random } from '../random.ts'
import type { Loss, LossKind, LossRows, LossShape } from './loss.ts'

/**
 * A network of measured and predicted torque: the mean over rows of softplus(tanh([measured, predicted] U1 + d1) U2 + d2).
 * Parameters: U1 (2·joints × hidden, row-major), d1 (hidden), U2 (hidden), d2 (1).
 */
export const unstructured: LossKind = { name: 'unstructured', parameterCount, initialParameters, create }

function parameterCount({ joints, hidden }: LossShape): number {
  return (2 * joints + 1) * hidden + hidden + 1
}

/**
 * A bowl around measured = predicted, so that the first steps already go downhill: each hidden unit looks at one joint's
 * error, in pairs of opposite sign with a threshold, and U2 adds the pair up. Random values on top break the symmetry.
 */
function initialParameters(shape: LossShape, random: Random): Float64Array {
  const { joints, hidden } = shape
  const parameters = new Float64Array(parameterCount(shape))
  const { d1, u2 } = places(shape)
  for (let k = 0; k < d1; k++) parameters[k] = 0.05 * random.normal()
  for (let u = 0; u < hidden; u++) {
    const joint = (u >> 1) % joints
    const sign = u % 2 === 0 ? 0.5 : -0.5
    parameters[joint * hidden + u] += sign
    parameters[(joints + joint) * hidden + u] -= sign
    parameters[d1 + u] = -1
    parameters[u2 + u] = 1
  }
  return parameters
}

function places({ joints, hidden }: LossShape) {
  const d1 = 2 * joints * hidden
  const u2 = d1 + hidden
  return { d1, u2, d2: u2 + hidden }
}

function create(shape: LossShape, maxRows: number): Loss {
  const { joints, hidden } = shape
  const { d1, u2, d2 } = places(shape)
  const h = new Float64Array(maxRows * hidden)
  const s = new Float64Array(maxRows)
  const tangents = new Float64Array(hidden)

  function evaluate(phi: Float64Array, { rows, measured, predicted }: LossRows): void {
    for (let r = 0; r < rows; r++) {
      const row = r * hidden
      for (let u = 0; u < hidden; u++) h[row + u] = phi[d1 + u]
      for (let j = 0; j < joints; j++) {
        const tau = measured[r * joints + j]
        const y = predicted[r * joints + j]
        for (let u = 0; u < hidden; u++) h[row + u] += tau * phi[j * hidden + u] + y * phi[(joints + j) * hidden + u]
      }
      s[r] = phi[d2]
      for (let u = 0; u < hidden; u++) {
        h[row + u] = tanh(h[row + u])
        s[r] += h[row + u] * phi[u2 + u]
      }
    }
  }

  function mean(rows: number): number {
    let sum = 0
    for (let r = 0; r < rows; r++) sum += softplus(s[r])
    return sum / rows
  }

  function value(phi: Float64Array, given: LossRows): number {
    evaluate(phi, given)
    return mean(given.rows)
  }

  function gradient(phi: Float64Array, given: LossRows, predictionGradient: Float64Array): number {
    const { rows } = given
    evaluate(phi, given)
    for (let r = 0; r < rows; r++) {
      const slope = logistic(s[r]) / rows
      for (let j = 0; j < joints; j++) {
        let sum = 0
        for (let u = 0; u < hidden; u++) {
          const hu = h[r * hidden + u]
          sum += phi[(joints + j) * hidden + u] * phi[u2 + u] * (1 - hu * hu)
        }
        predictionGradient[r * joints + j] = slope * sum
      }
    }
    return mean(rows)
  }

  function addParameterGradient(phi: Float64Array, given: LossRows, scale: number, sum: Float64Array): void {
    const { rows, measured, predicted } = given
    evaluate(phi, given)
    for (let r = 0; r < rows; r++) {
      const slope = (scale * logistic(s[r])) / rows
      sum[d2] += slope
      for (let u = 0; u < hidden; u++) {
        const hu = h[r * hidden + u]
        const back = slope * phi[u2 + u] * (1 - hu * hu)
        sum[u2 + u] += slope * hu
        sum[d1 + u] += back
        for (let j = 0; j < joints; j++) {
          sum[j * hidden + u] += measured[r * joints + j] * back
          sum[(joints + j) * hidden + u] += predicted[r * joints + j] * back
        }
      }
    }
  }

  // Tangent of the two functions above when the prediction moves along ẏ: each line is one of theirs, differentiated.
  function secondOrder(
    phi: Float64Array,
    given: LossRows,
    tangent: Float64Array,
    gradientTangent: Float64Array,
    scale: number,
    sum: Float64Array,
  ): void {
    const { rows, measured, predicted } = given
    evaluate(phi, given)
    for (let r = 0; r < rows; r++) {
      let sTangent = 0
      for (let u = 0; u < hidden; u++) {
        const hu = h[r * hidden + u]
        let moved = 0
        for (let j = 0; j < joints; j++) moved += tangent[r * joints + j] * phi[(joints + j) * hidden + u]
        tangents[u] = (1 - hu * hu) * moved
        sTangent += tangents[u] * phi[u2 + u]
      }
      const sigma = logistic(s[r])
      const slope = sigma / rows
      const slopeTangent = (sigma * (1 - sigma) * sTangent) / rows
      for (let j = 0; j < joints; j++) gradientTangent[r * joints + j] = 0
      sum[d2] += scale * slopeTangent
      for (let u = 0; u < hidden; u++) {
        const hu = h[r * hidden + u]
        const bend = 1 - hu * hu
        const back = slope * phi[u2 + u] * bend
        const backTangent = phi[u2 + u] * (slopeTangent * bend - slope * 2 * hu * tangents[u])
        sum[u2 + u] += scale * (slopeTangent * hu + slope * tangents[u])
        sum[d1 + u] += scale * backTangent
        for (let j = 0; j < joints; j++) {
          const k = r * joints + j
          gradientTangent[k] += phi[(joints + j) * hidden + u] * backTangent
          sum[j * hidden + u] += scale * measured[k] * backTangent
          sum[(joints + j) * hidden + u] += scale * (predicted[k] * backTangent + tangent[k] * back)
        }
      }
    }
  }

  const slopes = new Float64Array(maxRows * joints)

  function weights(phi: Float64Array, given: LossRows, out: Float64Array): void {
    const { rows, measured, predicted } = given
    gradient(phi, given, slopes)
    for (let j = 0; j < joints; j++) {
      let own = 0
      let plain = 0
      for (let r = 0; r < rows; r++) {
        const k = r * joints + j
        own += Math.abs(slopes[k])
        plain += Math.abs((2 / (rows * joints)) * (measured[k] - predicted[k]))
      }
      out[j] = plain === 0 ? 1 : own / plain
    }
  }

  return { parameterCount: parameterCount(shape), value, gradient, addParameterGradient, secondOrder, weights }
}

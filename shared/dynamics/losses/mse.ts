import type { Loss, LossKind, LossRows, LossShape } from './loss.ts'

/** Plain squared error, the mean over rows and joints of e², e = measured − predicted. No parameters. */
export const mse: LossKind = {
  name: 'mse',
  parameterCount: () => 0,
  initialParameters: () => new Float64Array(0),
  create,
}

function create({ joints }: LossShape): Loss {
  function value(_parameters: Float64Array, { rows, measured, predicted }: LossRows): number {
    let sum = 0
    for (let k = 0; k < rows * joints; k++) {
      const e = measured[k] - predicted[k]
      sum += e * e
    }
    return sum / (rows * joints)
  }

  function gradient(parameters: Float64Array, given: LossRows, predictionGradient: Float64Array): number {
    const { rows, measured, predicted } = given
    const scale = -2 / (rows * joints)
    for (let k = 0; k < rows * joints; k++) predictionGradient[k] = scale * (measured[k] - predicted[k])
    return value(parameters, given)
  }

  function secondOrder(
    _parameters: Float64Array,
    { rows }: LossRows,
    tangent: Float64Array,
    gradientTangent: Float64Array,
  ): void {
    const scale = 2 / (rows * joints)
    for (let k = 0; k < rows * joints; k++) gradientTangent[k] = scale * tangent[k]
  }

  return {
    parameterCount: 0,
    value,
    gradient,
    addParameterGradient: () => {},
    secondOrder,
    weights: (_parameters, _given, weights) => void weights.fill(1, 0, joints),
  }
}

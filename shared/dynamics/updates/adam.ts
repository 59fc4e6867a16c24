import type { UpdateKind } from './update.ts'

const beta1 = 0.9
const beta2 = 0.999
const epsilon = 1e-8

/**
 * Adam with bias correction: m ← β1 m + (1 − β1) g, v ← β2 v + (1 − β2) g²,
 * θ ← θ − rate · (m / (1 − β1ᵗ)) / (√(v / (1 − β2ᵗ)) + ε), with β1 = 0.9, β2 = 0.999, ε = 1e-8.
 *
 * State: β1ᵗ, β2ᵗ (multiplied up, so that no power function is needed), then m, then v.
 *
 * Source: Kingma and Ba, Adam: A Method for Stochastic Optimization (2015), algorithm 1.
 */
export const adam: UpdateKind = {
  name: 'adam',
  stateLength: (parameterCount) => 2 + 2 * parameterCount,
  initialState(parameterCount) {
    const state = new Float64Array(2 + 2 * parameterCount)
    state[0] = 1
    state[1] = 1
    return state
  },
  step(parameters, gradient, state, rate) {
    const count = parameters.length
    state[0] *= beta1
    state[1] *= beta2
    const firstCorrection = 1 - state[0]
    const secondCorrection = 1 - state[1]
    for (let k = 0; k < count; k++) {
      const g = gradient[k]
      const m = beta1 * state[2 + k] + (1 - beta1) * g
      const v = beta2 * state[2 + count + k] + (1 - beta2) * g * g
      state[2 + k] = m
      state[2 + count + k] = v
      parameters[k] -= (rate * (m / firstCorrection)) / (Math.sqrt(v / secondCorrection) + epsilon)
    }
  },
}

import type { UpdateKind } from './update.ts'

/** Plain gradient descent: θ ← θ − rate · g. No state. */
export const sgd: UpdateKind = {
  name: 'sgd',
  stateLength: () => 0,
  initialState: () => new Float64Array(0),
  step(parameters, gradient, _state, rate) {
    for (let k = 0; k < parameters.length; k++) parameters[k] -= rate * gradient[k]
  },
}

import { exp } from '../elementary.ts'
import type { Learnable, Tape } from './learnable.ts'
import { createRecursiveUpdate, SURPRISE_SHARE } from './recursive.ts'
import type { FilterConstants, StepTrace } from './recursive.ts'
import type { LinearRows } from './update.ts'

/** Where the constants lie in θ. All but the off-diagonal values of L are logarithms. */
function placesOf(size: number, joints: number) {
  const initialBias = (size * (size + 1)) / 2
  const driftOfState = initialBias + joints
  const driftOfBias = driftOfState + size
  const noise = driftOfBias + joints
  const decay = noise + joints
  const threshold = decay + 1
  const opening = threshold + 1
  return { initialBias, driftOfState, driftOfBias, noise, decay, threshold, opening, count: opening + size }
}

const isDiagonal = (r: number, c: number) => r === c

/** θ of constants; the inverse of {@link constantsOf}. */
export function thetaOf(constants: FilterConstants): Float64Array {
  const factor = constants.initialFactor.slice()
  for (let r = 0, k = 0; k < factor.length; r++) {
    for (let c = 0; c <= r; c++, k++) if (isDiagonal(r, c)) factor[k] = Math.log(factor[k])
  }
  const logs = [
    ...constants.initialBias, ...constants.driftOfState, ...constants.driftOfBias, ...constants.noise, constants.decay,
    constants.threshold, ...constants.opening,
  ].map(value => Math.log(Math.max(value, 1e-12)))
  return Float64Array.from([...factor, ...logs])
}

/** The constants that θ stands for. */
export function constantsOf(theta: Float64Array, size: number, joints: number, rowsPerStep: number): FilterConstants {
  const at = placesOf(size, joints)
  const part = (from: number, length: number) => Array.from(theta.subarray(from, from + length), exp)
  const initialFactor = Array.from(theta.subarray(0, at.initialBias))
  for (let r = 0, k = 0; r < size; r++) {
    for (let c = 0; c <= r; c++, k++) if (isDiagonal(r, c)) initialFactor[k] = exp(initialFactor[k])
  }
  return {
    rowsPerStep,
    decay: exp(theta[at.decay]),
    initialFactor,
    initialBias: part(at.initialBias, joints),
    driftOfState: part(at.driftOfState, size),
    driftOfBias: part(at.driftOfBias, joints),
    noise: part(at.noise, joints),
    threshold: exp(theta[at.threshold]),
    opening: part(at.opening, size),
  }
}

/**
 * The recursive update with its constants to be learned. The tape is exact reverse mode through the filter: covariance,
 * running innovation and gate included; only the bound on variances is taken as constant.
 */
export function createLearnableRecursive(size: number, joints: number, rowsPerStep: number): Learnable {
  return {
    decayIndex: placesOf(size, joints).decay,
    update: theta => createRecursiveUpdate(constantsOf(theta, size, joints, rowsPerStep), size, joints),
    tape: (theta, steps) => createTape(constantsOf(theta, size, joints, rowsPerStep), size, joints, steps),
  }
}

function createTape(constants: FilterConstants, size: number, joints: number, steps: number): Tape {
  const d = size + joints
  const { rowsPerStep, noise, threshold, decay, opening } = constants
  const scalars = rowsPerStep * joints
  const at = placesOf(size, joints)
  const update = createRecursiveUpdate(constants, size, joints)
  const initial = update.initial().covariance
  const values = Array.from({ length: steps + 1 }, () => new Float64Array(d))
  const asOf = new Float64Array(steps + 1)
  const traces: StepTrace[] = Array.from({ length: steps }, () => ({
    before: new Float64Array(d * d), prior: new Float64Array(d), gains: new Float64Array(scalars * d),
    variances: new Float64Array(scalars), innovations: new Float64Array(scalars), surpriseBefore: 0, seconds: 0,
  }))
  const surprises = new Float64Array(steps)
  const h = new Float64Array(d)
  const pv = new Float64Array(d)
  const vBar = new Float64Array(d)
  const pBar = new Float64Array(d * d)
  const p0Bar = new Float64Array(size * size)
  let last: { rows: LinearRows; row: number } | undefined

  function run(state: Parameters<Tape['run']>[0], rows: LinearRows, row: number): void {
    last = { rows, row }
    values[0].set(state.values)
    asOf[0] = state.asOf
    for (let i = 0; i < steps; i++) {
      const from = row + i * rowsPerStep
      update.step(state, rows, from, from + rowsPerStep, traces[i])
      values[i + 1].set(state.values)
      asOf[i + 1] = state.asOf
      surprises[i] = state.surprise
    }
  }

  function addGradient(slopes: readonly Float64Array[], isFresh: boolean, gradient: Float64Array): void {
    const { rows, row } = last!
    pBar.fill(0)
    p0Bar.fill(0)
    let surpriseBar = 0
    for (let i = steps - 1; i >= 0; i--) {
      const sBar = slopes[i + 1]
      takeOut(i, rows, (row + i * rowsPerStep) * joints, sBar, gradient)
      surpriseBar = throughGate(i, rows, (row + i * rowsPerStep) * joints, sBar, surpriseBar, gradient)
      throughTime(i, sBar, gradient)
      for (let k = 0; k < d; k++) slopes[i][k] += sBar[k]
    }
    if (isFresh) {
      for (let r = 0; r < size; r++) for (let c = 0; c < size; c++) p0Bar[r * size + c] += pBar[r * d + c]
      for (let j = 0; j < joints; j++) gradient[at.initialBias + j] += pBar[(size + j) * d + size + j] * constants.initialBias[j]
    }
    addInitial(gradient)
  }

  /** Backwards through the scalars of step i: sBar and pBar go from after to before them. */
  function takeOut(i: number, { basis }: LinearRows, first: number, sBar: Float64Array, gradient: Float64Array): void {
    const { gains, variances, innovations } = traces[i]
    for (let scalar = scalars - 1; scalar >= 0; scalar--) {
      const j = scalar % joints
      const own = size + j
      const v = gains.subarray(scalar * d, (scalar + 1) * d)
      const s = variances[scalar]
      const e = innovations[scalar]
      for (let c = 0; c < size; c++) h[c] = basis[(first + scalar) * size + c]
      let along = 0
      let quadratic = 0
      for (let r = 0; r < d; r++) {
        let sum = 0
        for (let c = 0; c < d; c++) sum += pBar[r * d + c] * v[c]
        pv[r] = sum
        quadratic += sum * v[r]
        along += sBar[r] * v[r]
      }
      const sVarianceBar = (quadratic - along * e) / (s * s)
      for (let r = 0; r < d; r++) vBar[r] = (sBar[r] * e - 2 * pv[r]) / s
      for (let c = 0; c < size; c++) vBar[c] += sVarianceBar * h[c]
      vBar[own] += sVarianceBar
      gradient[at.noise + j] += sVarianceBar * noise[j]
      const eBar = along / s
      for (let r = 0; r < d; r++) {
        const half = 0.5 * vBar[r]
        for (let c = 0; c < size; c++) {
          pBar[r * d + c] += half * h[c]
          pBar[c * d + r] += half * h[c]
        }
        pBar[r * d + own] += half
        pBar[own * d + r] += half
      }
      for (let c = 0; c < size; c++) sBar[c] -= eBar * h[c]
      sBar[own] -= eBar
    }
  }

  /** Backwards through gate and running innovation. Returns the derivative with respect to the innovation before. */
  function throughGate(
    i: number, { residual, basis }: LinearRows, first: number, sBar: Float64Array, after: number, gradient: Float64Array,
  ): number {
    const surprise = surprises[i]
    let surpriseBar = after
    if (surprise > threshold) {
      const open = 1 - threshold / surprise
      let openBar = 0
      for (let r = 0; r < size; r++) {
        for (let c = 0; c < size; c++) {
          const scale = Math.sqrt(opening[r] * opening[c])
          const term = scale * initial[r * d + c] * pBar[r * d + c]
          openBar += term
          p0Bar[r * size + c] += open * scale * pBar[r * d + c]
          gradient[at.opening + r] += open * term
        }
      }
      surpriseBar += (openBar * threshold) / (surprise * surprise)
      gradient[at.threshold] -= (openBar / surprise) * threshold
    }
    const share = (SURPRISE_SHARE * surpriseBar) / scalars
    const { prior } = traces[i]
    for (let k = 0; k < scalars && share !== 0; k++) {
      const j = k % joints
      let e = residual[first + k] - prior[size + j]
      for (let c = 0; c < size; c++) e -= basis[(first + k) * size + c] * prior[c]
      const factor = (2 * share * e) / noise[j]
      for (let c = 0; c < size; c++) sBar[c] -= factor * basis[(first + k) * size + c]
      sBar[size + j] -= factor
      gradient[at.noise + j] -= (share * e * e) / noise[j]
    }
    return (1 - SURPRISE_SHARE) * surpriseBar
  }

  /** Backwards through the time that passed before step i. */
  function throughTime(i: number, sBar: Float64Array, gradient: Float64Array): void {
    const { before, prior, seconds } = traces[i]
    if (seconds === 0) return
    const left = exp(-decay * seconds)
    let leftBar = 0
    for (let r = 0; r < d; r++) {
      const index = r < size ? at.driftOfState + r : at.driftOfBias + r - size
      const drift = r < size ? constants.driftOfState[r] : constants.driftOfBias[r - size]
      gradient[index] += pBar[r * d + r] * seconds * drift
      if (r >= size) {
        leftBar += (sBar[r] * prior[r]) / left
        sBar[r] *= left
      }
      for (let c = 0; c < d; c++) {
        const fadings = (r < size ? 0 : 1) + (c < size ? 0 : 1)
        if (fadings === 0) continue
        leftBar += pBar[r * d + c] * before[r * d + c] * (fadings === 1 ? 1 : 2 * left)
        pBar[r * d + c] *= fadings === 1 ? left : left * left
      }
    }
    gradient[at.decay] -= leftBar * left * seconds * decay
  }

  /** P0 = L Lᵀ. */
  function addInitial(gradient: Float64Array): void {
    const factor = constants.initialFactor
    const l = (r: number, c: number) => (c <= r ? factor[(r * (r + 1)) / 2 + c] : 0)
    for (let r = 0, k = 0; r < size; r++) {
      for (let c = 0; c <= r; c++, k++) {
        let sum = 0
        for (let q = 0; q < size; q++) sum += (p0Bar[r * size + q] + p0Bar[q * size + r]) * l(q, c)
        gradient[k] += isDiagonal(r, c) ? sum * l(r, c) : sum
      }
    }
  }

  return { values, asOf, run, addGradient }
}

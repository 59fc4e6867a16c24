import { factorise, solveFactorised } from '../identification/symmetric.ts'
import type { Kernels, NetworkHandle } from '../kernels/kernels.ts'
import { initialParameters, layerPlaces, parameterCount } from '../network.ts'
import type { NetworkShape } from '../network.ts'
import { createRandom } from '../random.ts'
import type { Random } from '../random.ts'
import type { Normalisation } from '../version.ts'
import { createContextBasis } from './basis.ts'
import type { Basis, ContextBasisInputs } from './basis.ts'
import type { LinearMotion } from './linear-motion.ts'

export interface ContextFitOptions {
  /** p, the length of z. */
  readonly size: number
  /** Widths of the hidden layers. */
  readonly hidden: readonly number[]
  /** Adam steps. */
  readonly steps: number
  /** Rows of one step, drawn at random from all motions. */
  readonly rowsPerStep: number
  /** Adam's rate at the start; it falls to zero along a half cosine. */
  readonly rate: number
  readonly seed: number
}

export const defaultContextFitOptions: ContextFitOptions = {
  size: 6, hidden: [96, 96], steps: 6000, rowsPerStep: 256, rate: 5e-3, seed: 1,
}

export interface ContextFitProgress {
  /** From 1. */
  readonly step: number
  readonly steps: number
  /** Mean squared error of y − base − A z over the last steps' rows, base standard deviations. */
  readonly error: number
}

export interface ContextFit {
  readonly inputs: ContextBasisInputs
  readonly basis: Basis
  /** Mean squared error with the best z of every stretch. */
  readonly error: number
}

/** Steps between two exact solutions for z, and rows of a stretch they look at. */
const solveEvery = 250
const rowsOfSolution = 120

/** Keeps z small where a stretch says little of it. */
const ridge = 1e-2

/**
 * Fits A(x), a relu network, to y − base with one free z for every stretch of constant payload; z of unloaded motions is
 * zero. Adam moves the network; z is solved for exactly now and again, and at the end whitened: its second moments over the
 * stretches are 1. Motions whose changes of payload are not known are left out.
 *
 * A generator: deterministic for a seed, and nothing happens between two `next` calls.
 *
 * @param motions  prepared with any basis, which is not looked at
 * @throws {RangeError} fewer than two loaded stretches
 * Source: alternating least squares for a bilinear model (common practice, no source); Adam: Kingma and Ba 2015.
 */
export function* fitContextBasis(
  kernels: Kernels, motions: readonly LinearMotion[], normalisation: Normalisation, given: Partial<ContextFitOptions> = {},
): Generator<ContextFitProgress, ContextFit> {
  const options = { ...defaultContextFitOptions, ...given }
  const { size } = options
  const joints = normalisation.outputMean.length
  const inputs = 3 * joints
  const shape: NetworkShape = { sizes: [inputs, ...options.hidden, joints * size], activation: 'relu' }
  const random = createRandom(options.seed)
  const stretches = stretchesOf(motions)
  if (stretches.filter(({ unloaded }) => !unloaded).length < 2) {
    throw new RangeError('A context basis needs at least two stretches under different payloads: add recordings with payload.')
  }
  const states = stretches.map(({ unloaded }) => Float64Array.from({ length: size }, () => (unloaded ? 0 : random.normal())))
  const network = kernels.loadNetwork(shape, initialParameters(shape, random))
  const moments = kernels.createMoments(network)
  const loss = kernels.loadLoss('mse', { joints: joints * size, inputs, hidden: 0, positive: 'exp' }, [])
  const batch = kernels.createBatch(inputs, joints * size)
  try {
    yield* train()
    solveStates(kernels, network, stretches, states, size, joints, random)
    const parameters = whiten(shape, network.read(), states, stretches, size, joints)
    const given: ContextBasisInputs = { size, network: shape, parameters, normalisation }
    network.write(parameters)
    const error = solveStates(kernels, network, stretches, states, size, joints, random)
    return { inputs: given, basis: createContextBasis(given), error }
  } finally {
    for (const handle of [network, moments, loss, batch]) handle.free()
  }

  function* train(): Generator<ContextFitProgress, void> {
    const { steps, rowsPerStep } = options
    const ends = cumulative(stretches)
    const x = new Float32Array(rowsPerStep * inputs)
    const outputs = new Float32Array(rowsPerStep * joints * size)
    const chosen = new Int32Array(rowsPerStep)
    const places = new Int32Array(rowsPerStep)
    let running = 0
    for (let step = 1; step <= steps; step++) {
      for (let r = 0; r < rowsPerStep; r++) {
        const at = random.integer(ends[ends.length - 1])
        const s = stretchAt(ends, at)
        chosen[r] = s
        places[r] = stretches[s].from + at - (s > 0 ? ends[s - 1] : 0)
        x.set(stretches[s].motion.x.subarray(places[r] * inputs, (places[r] + 1) * inputs), r * inputs)
      }
      kernels.forward(network, x, rowsPerStep, outputs)
      const error = makeTargets(outputs, chosen, places)
      running = step === 1 ? error : 0.99 * running + 0.01 * error
      batch.loadNormalised(x, outputs, rowsPerStep)
      const rate = options.rate * 0.5 * (1 + Math.cos((Math.PI * (step - 1)) / steps))
      kernels.step(network, loss, batch, { scheme: 'all', rowsPerStep, rate: Math.max(rate, 1e-9), moments })
      if (step % solveEvery === 0 && step < steps) solveStates(kernels, network, stretches, states, size, joints, random)
      yield { step, steps, error: running }
    }
  }

  /**
   * Turns outputs A into A + e zᵀ: plain squared error towards that has the slope −2 e zᵀ, which is the slope of e² in A.
   * Returns the mean of e².
   */
  function makeTargets(outputs: Float32Array, chosen: Int32Array, places: Int32Array): number {
    let sum = 0
    for (let r = 0; r < chosen.length; r++) {
      const z = states[chosen[r]]
      const { residual } = stretches[chosen[r]].motion
      for (let j = 0; j < joints; j++) {
        const at = (r * joints + j) * size
        let e = residual[places[r] * joints + j]
        for (let c = 0; c < size; c++) e -= outputs[at + c] * z[c]
        sum += e * e
        for (let c = 0; c < size; c++) outputs[at + c] += e * z[c]
      }
    }
    return sum / (chosen.length * joints)
  }
}

/** Rows from..to of a motion under one payload. */
interface Stretch {
  readonly motion: LinearMotion
  readonly from: number
  readonly to: number
  readonly unloaded: boolean
}

/** Rows of a stretch below which its z would be guessed. */
const leastRows = 100

function stretchesOf(motions: readonly LinearMotion[]): Stretch[] {
  return motions.flatMap(motion => {
    const { changes, time, rows, unloaded } = motion
    if (changes === null) return []
    const rowAfter = (at: number) => { const row = time.findIndex(value => value >= at); return row < 0 ? rows : row }
    const bounds = [0, ...changes.map(rowAfter), rows]
    return bounds.slice(1)
      .map((to, k) => ({ motion, from: bounds[k], to, unloaded }))
      .filter(({ from, to }) => to - from >= leastRows)
  })
}

function cumulative(stretches: readonly Stretch[]): number[] {
  let sum = 0
  return stretches.map(({ from, to }) => (sum += to - from))
}

function stretchAt(ends: readonly number[], at: number): number {
  let low = 0
  let high = ends.length - 1
  while (low < high) {
    const middle = (low + high) >> 1
    if (ends[middle] > at) high = middle
    else low = middle + 1
  }
  return low
}

/** The best z of every loaded stretch for the network as it is. Returns the mean squared error they leave. */
function solveStates(
  kernels: Kernels, network: NetworkHandle, stretches: readonly Stretch[], states: readonly Float64Array[], size: number,
  joints: number,
  random: Random,
): number {
  const inputs = 3 * joints
  const x = new Float32Array(rowsOfSolution * inputs)
  const outputs = new Float32Array(rowsOfSolution * joints * size)
  const normal = new Float64Array(size * size)
  let total = 0
  stretches.forEach(({ motion, from, to, unloaded }, s) => {
    const rows = Float64Array.from({ length: rowsOfSolution }, (_, k) =>
      from + Math.min(Math.floor(((k + random.uniform()) * (to - from)) / rowsOfSolution), to - from - 1))
    rows.forEach((row, k) => x.set(motion.x.subarray(row * inputs, (row + 1) * inputs), k * inputs))
    kernels.forward(network, x, rowsOfSolution, outputs)
    const z = states[s]
    if (!unloaded) {
      normal.fill(0)
      z.fill(0)
      for (let k = 0; k < rowsOfSolution * joints; k++) {
        const y = motion.residual[rows[Math.floor(k / joints)] * joints + (k % joints)]
        for (let r = 0; r < size; r++) {
          z[r] += outputs[k * size + r] * y
          for (let c = 0; c <= r; c++) normal[r * size + c] += outputs[k * size + r] * outputs[k * size + c]
        }
      }
      for (let r = 0; r < size; r++) normal[r * size + r] += ridge
      factorise(normal, size)
      solveFactorised(normal, size, z)
    }
    for (let k = 0; k < rowsOfSolution * joints; k++) {
      let e = motion.residual[rows[Math.floor(k / joints)] * joints + (k % joints)]
      for (let c = 0; c < size; c++) e -= outputs[k * size + c] * z[c]
      total += e * e
    }
  })
  return total / (stretches.length * rowsOfSolution * joints)
}

/** Turns the last layer so that the second moments of z over the loaded stretches are 1; A z stays what it was. */
function whiten(
  shape: NetworkShape, parameters: Float32Array, states: readonly Float64Array[], stretches: readonly Stretch[],
  size: number, joints: number,
): Float32Array {
  const loaded = states.filter((_, s) => !stretches[s].unloaded)
  const factor = new Float64Array(size * size)
  for (const z of loaded) {
    for (let r = 0; r < size; r++) for (let c = 0; c <= r; c++) factor[r * size + c] += (z[r] * z[c]) / loaded.length
  }
  for (let r = 0; r < size; r++) factor[r * size + r] += 1e-6
  factorise(factor, size)
  const { weights, inputs, outputs, biases } = layerPlaces(shape).at(-1)!
  const turned = parameters.slice(0, parameterCount(shape))
  const turn = (at: number): void => {
    for (let j = 0; j < joints; j++) {
      for (let c = 0; c < size; c++) {
        let sum = 0
        for (let r = c; r < size; r++) sum += parameters[at + j * size + r] * factor[r * size + c]
        turned[at + j * size + c] = sum
      }
    }
  }
  for (let i = 0; i < inputs; i++) turn(weights + i * outputs)
  turn(biases)
  return turned
}

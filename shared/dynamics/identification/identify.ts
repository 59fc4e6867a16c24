import type { Motion } from '../motion.ts'
import {
  createChain, inertialFaults, inertialFromParameters, inertialRegressor, PARAMETERS_PER_LINK,
} from '../rigid-body/index.ts'
import type { ChainDescription, ChainJoint, Inertial, JointFriction } from '../rigid-body/index.ts'
import { checkLength } from '../shape-error.ts'
import { FRICTION_COLUMNS, frictionColumns, searchSpeeds } from './friction-search.ts'
import type { FrictionSpeeds } from './friction-search.ts'
import { createRigidBodyEvaluator } from './identified-base.ts'
import type { IdentifiedBase } from './identified-base.ts'
import { leastEigenvalue, nearestConsistent, pseudoInertia } from './pseudo-inertia.ts'
import { factorise, inverseDiagonal, solveFactorised, symmetricEigen } from './symmetric.ts'

export interface IdentificationOptions {
  /** Standard deviation of the description's inertial parameters, as a share of them. */
  readonly priorShare: number
  /** Most rows used: more are thinned out evenly. */
  readonly mostRows: number
  /** Rounds of weights and friction speeds; each ends with a linear solution. */
  readonly rounds: number
}

export const defaultIdentificationOptions: IdentificationOptions = { priorShare: 0.08, mostRows: 8000, rounds: 4 }

/** What the motions say about one parameter. */
export interface IdentifiedParameter {
  /** The joint, or the joint that moves the link. */
  readonly joint: string
  readonly name:
    | 'mass' | 'first_moment_x' | 'first_moment_y' | 'first_moment_z'
    | 'inertia_xx' | 'inertia_xy' | 'inertia_xz' | 'inertia_yy' | 'inertia_yz' | 'inertia_zz'
    | 'offset' | 'viscous' | 'coulomb' | 'stribeck'
  readonly unit: string
  /** What the description says; 0 where it says nothing. */
  readonly prior: number
  readonly value: number
  readonly standardDeviation: number
  /** Whether the motions at least halved the prior's standard deviation. */
  readonly identifiable: boolean
}

export interface Identification {
  readonly base: IdentifiedBase
  readonly parameters: readonly IdentifiedParameter[]
  /** Root mean square error per joint on the motions used, N·m (sliding: N): description alone, and identified. */
  readonly beforePerJoint: readonly number[]
  readonly afterPerJoint: readonly number[]
  /** Combinations of parameters that the motions know better than the prior does. */
  readonly rank: number
  /** Best known over worst known of these combinations, as the ratio of their standard deviations, prior = 1 each. */
  readonly conditioning: number
  /** Whether every link is a body that can exist; always true, since the solution is constrained to it. */
  readonly consistent: boolean
  /** Whether the unconstrained solution had to be moved for that. */
  readonly constrained: boolean
}

/** Where an identification is. */
export interface IdentificationProgress {
  /** From 1. */
  readonly round: number
  readonly rounds: number
  /** Mean over joints of residual variance over torque variance, on the motions used. */
  readonly error: number
}

/**
 * Identifies a rigid-body base: inertial parameters of all links, and of every joint an offset, viscous, Coulomb and
 * Stribeck friction, by weighted linear least squares on the full regressor with the description as prior. Rows weigh
 * 1 / residual variance of their joint. The two speeds of a joint's friction are searched for between two solutions. Links
 * that could not exist are moved to the nearest solution that can, by alternating directions in the metric of the data.
 *
 * A generator: progress after every round, and nothing happens between two `next` calls.
 *
 * @param chain  description; its gravity and kinematics are trusted
 * @param motions  without payload, in SI units; torque on the link side, gravity included
 * @throws {RangeError} no rows
 * @throws {ShapeError} a motion's columns do not fit the chain
 * Source: Atkeson, An, Hollerbach (1986); consistency: Wensing, Kim, Slotine (2018); alternating directions: Boyd, Parikh, Chu,
 * Peleato, Eckstein (2011) (all from memory).
 */
export function* identifyBase(
  chain: ChainDescription, motions: readonly Motion[], options: IdentificationOptions = defaultIdentificationOptions,
): Generator<IdentificationProgress, Identification> {
  const data = collect(chain, motions, options.mostRows)
  const { joints } = data
  const prior = priorOf(chain, data, options.priorShare)
  const speeds: (FrictionSpeeds | null)[] = new Array<null>(joints).fill(null)
  const held = new Uint8Array(prior.mean.length)
  let variance: Float64Array = Float64Array.from(data.torqueVariance)
  let parameters: Float64Array = prior.mean.slice()
  for (let round = 1; round <= options.rounds; round++) {
    chooseSpeeds(data, parameters, speeds)
    const system = assemble(data, speeds as FrictionSpeeds[], variance, prior)
    parameters = solveHolding(system, prior, held)
    variance = residualVariance(data, speeds as FrictionSpeeds[], parameters)
    let error = 0
    for (let j = 0; j < joints; j++) error += variance[j] / data.torqueVariance[j] / joints
    yield { round, rounds: options.rounds, error }
  }
  const found = speeds as FrictionSpeeds[]
  const system = assemble(data, found, variance, prior)
  parameters = solveHolding(system, prior, held)
  const constrained = makeConsistent(system, prior, held, parameters)
  return report(chain, motions, prior, found, system, parameters, held, constrained)
}

interface Data {
  readonly joints: number
  readonly rows: number
  /** Per joint, rows × inertial columns: torque per unit of each inertial parameter. */
  readonly regressors: readonly Float64Array[]
  /** Per joint, inertial × inertial: Yᵀ Y. */
  readonly normals: readonly Float64Array[]
  readonly velocity: readonly Float64Array[]
  readonly torque: readonly Float64Array[]
  readonly torqueVariance: Float64Array
}

function collect(description: ChainDescription, motions: readonly Motion[], mostRows: number): Data {
  const chain = createChain(description)
  const joints = chain.size
  const inertial = PARAMETERS_PER_LINK * joints
  const total = motions.reduce((sum, { rows }) => sum + rows, 0)
  if (total === 0) throw new RangeError('No rows to identify from: give at least one motion without payload.')
  const stride = Math.max(1, Math.ceil(total / mostRows))
  const rows = motions.reduce((sum, motion) => sum + Math.ceil(motion.rows / stride), 0)
  const perJoint = (length: number) => Array.from({ length: joints }, () => new Float64Array(length))
  const data: Data = {
    joints, rows, regressors: perJoint(rows * inertial), normals: perJoint(inertial * inertial), velocity: perJoint(rows),
    torque: perJoint(rows), torqueVariance: new Float64Array(joints),
  }
  const y = new Float64Array(joints * inertial)
  let at = 0
  for (const { name, rows: count, states, torque } of motions) {
    checkLength(`${name}: states`, states.length, 3 * joints * count, `${count} rows of ${joints} joints`)
    checkLength(`${name}: torque`, torque.length, joints * count, `${count} rows of ${joints} joints`)
    for (let row = 0; row < count; row += stride, at++) {
      const s = states.subarray(3 * joints * row, 3 * joints * (row + 1))
      inertialRegressor(chain, s.subarray(0, joints), s.subarray(joints, 2 * joints), s.subarray(2 * joints), y)
      for (let j = 0; j < joints; j++) {
        data.regressors[j].set(y.subarray(j * inertial, (j + 1) * inertial), at * inertial)
        data.velocity[j][at] = s[joints + j]
        data.torque[j][at] = torque[joints * row + j]
      }
    }
  }
  for (let j = 0; j < joints; j++) {
    addSquare(data.regressors[j], rows, inertial, PARAMETERS_PER_LINK * j, data.normals[j])
    data.torqueVariance[j] = varianceOf(data.torque[j])
  }
  return data
}

/** Adds Yᵀ Y to the lower triangle; columns before `first` are zero: a joint feels nothing of the links before it. */
function addSquare(y: Float64Array, rows: number, columns: number, first: number, sum: Float64Array): void {
  for (let row = 0; row < rows; row++) {
    const at = row * columns
    for (let r = first; r < columns; r++) {
      const value = y[at + r]
      if (value === 0) continue
      for (let c = first; c <= r; c++) sum[r * columns + c] += value * y[at + c]
    }
  }
}

function varianceOf(values: Float64Array): number {
  let mean = 0
  for (const value of values) mean += value / values.length
  let sum = 0
  for (const value of values) sum += (value - mean) ** 2
  return Math.max(sum / values.length, 1e-12)
}

interface Prior {
  readonly mean: Float64Array
  readonly deviation: Float64Array
  /** Length scale (m) and mass scale (kg) of each link. */
  readonly length: Float64Array
  readonly mass: Float64Array
}

function priorOf({ joints: links }: ChainDescription, data: Data, share: number): Prior {
  const { joints } = data
  const inertial = PARAMETERS_PER_LINK * joints
  const mean = new Float64Array(inertial + FRICTION_COLUMNS * joints)
  const deviation = new Float64Array(mean.length)
  const length = new Float64Array(joints)
  const mass = new Float64Array(joints)
  const heaviest = Math.max(...links.map(link => link.inertial.mass)) || unknownMass
  links.forEach((link, i) => {
    const at = PARAMETERS_PER_LINK * i
    mean.set(createChain({ joints: [link], gravity: [0, 0, 0], flange: link.offset }).linkParameters, at)
    const known = mean[at] > 0
    mass[i] = known ? mean[at] : heaviest
    const size = Math.sqrt((mean[at + 4] + mean[at + 7] + mean[at + 9]) / (2 * mass[i]))
    length[i] = known ? Math.max(size, 0.02) : unknownLength
    // A link whose mass nobody states can be anything up to twice the arm's heaviest.
    const trust = known ? share : 2
    nearestConsistent(mean, at, length[i], leastShare * mass[i], mean)
    deviation[at] = trust * mass[i]
    for (let k = 1; k < 4; k++) deviation[at + k] = trust * mass[i] * length[i]
    for (let k = 4; k < 10; k++) deviation[at + k] = trust * mass[i] * length[i] * length[i]
  })
  for (let j = 0; j < joints; j++) {
    const size = 10 * Math.sqrt(data.torqueVariance[j])
    const speed = Math.sqrt(varianceOf(data.velocity[j]))
    for (let k = 0; k < FRICTION_COLUMNS; k++) {
      deviation[inertial + FRICTION_COLUMNS * j + k] = k === 1 ? size / Math.max(speed, 1e-3) : size
    }
  }
  return { mean, deviation, length, mass }
}

/** Scales of a link of which nothing is stated, in an arm of which nothing is: kg, m. */
const unknownMass = 3
const unknownLength = 0.15

/** Least eigenvalue of a pseudo-inertia that counts as a body, as a share of the link's mass. */
const leastShare = 1e-5

function chooseSpeeds(data: Data, parameters: Float64Array, speeds: (FrictionSpeeds | null)[]): void {
  const inertial = PARAMETERS_PER_LINK * data.joints
  const residual = new Float64Array(data.rows)
  for (let j = 0; j < data.joints; j++) {
    const y = data.regressors[j]
    for (let row = 0; row < data.rows; row++) {
      let torque = data.torque[j][row]
      for (let c = PARAMETERS_PER_LINK * j; c < inertial; c++) torque -= y[row * inertial + c] * parameters[c]
      residual[row] = torque
    }
    speeds[j] = searchSpeeds(data.velocity[j], residual, speeds[j])
  }
}

interface System {
  readonly size: number
  /** Lower triangle of Σ w Yᵀ Y, without the prior. */
  readonly information: Float64Array
  /** Σ w Yᵀ τ, without the prior. */
  readonly right: Float64Array
}

function assemble(data: Data, speeds: readonly FrictionSpeeds[], variance: Float64Array, prior: Prior): System {
  const { joints, rows } = data
  const inertial = PARAMETERS_PER_LINK * joints
  const size = prior.mean.length
  const information = new Float64Array(size * size)
  const right = new Float64Array(size)
  const columns = new Float64Array(FRICTION_COLUMNS)
  for (let j = 0; j < joints; j++) {
    const w = 1 / variance[j]
    const first = PARAMETERS_PER_LINK * j
    const own = inertial + FRICTION_COLUMNS * j
    const normal = data.normals[j]
    for (let r = first; r < inertial; r++) {
      for (let c = first; c <= r; c++) information[r * size + c] += w * normal[r * inertial + c]
    }
    const y = data.regressors[j]
    for (let row = 0; row < rows; row++) {
      const torque = data.torque[j][row]
      const at = row * inertial
      for (let c = first; c < inertial; c++) right[c] += w * y[at + c] * torque
      frictionColumns(data.velocity[j][row], speeds[j], columns, 0)
      for (let k = 0; k < FRICTION_COLUMNS; k++) {
        const value = w * columns[k]
        right[own + k] += value * torque
        for (let c = first; c < inertial; c++) information[(own + k) * size + c] += value * y[at + c]
        for (let l = 0; l <= k; l++) information[(own + k) * size + own + l] += value * columns[l]
      }
    }
  }
  return { size, information, right }
}

/** Precision that keeps a coefficient of friction at zero. */
const heldPrecision = 1e12

function precisionOf(prior: Prior, held: Uint8Array, k: number): number {
  const own = 1 / (prior.deviation[k] * prior.deviation[k])
  return held[k] ? heldPrecision * own : own
}

/** The solution with the prior; coefficients of friction that come out negative are held at zero, and it is solved again. */
function solveHolding({ size, information, right }: System, prior: Prior, held: Uint8Array): Float64Array {
  const inertial = PARAMETERS_PER_LINK * prior.mass.length
  held.fill(0)
  for (;;) {
    const matrix = information.slice()
    const solution = right.slice()
    for (let k = 0; k < size; k++) {
      const precision = precisionOf(prior, held, k)
      matrix[k * size + k] += precision
      solution[k] += precision * prior.mean[k]
    }
    if (!factorise(matrix, size)) throw new RangeError('The motions and the description hold numbers that cannot be solved for.')
    solveFactorised(matrix, size, solution)
    let found = false
    for (let k = inertial; k < size; k++) {
      if ((k - inertial) % FRICTION_COLUMNS === 0 || held[k] || solution[k] >= 0) continue
      held[k] = 1
      found = true
    }
    if (!found) return solution
  }
}

const mostAlternations = 400

/** Moves the solution to one whose links can all exist. Returns whether that was needed. */
function makeConsistent({ size, information, right }: System, prior: Prior, held: Uint8Array, parameters: Float64Array): boolean {
  const links = prior.mass.length
  const isConsistent = (values: Float64Array) => prior.mass.every((mass, i) =>
    leastEigenvalue(values, PARAMETERS_PER_LINK * i, prior.length[i]) >= 0.5 * leastShare * mass)
  if (isConsistent(parameters)) return false
  const inertial = PARAMETERS_PER_LINK * links
  const matrix = information.slice()
  const steady = right.slice()
  for (let k = 0; k < size; k++) {
    const precision = precisionOf(prior, held, k)
    matrix[k * size + k] += precision
    steady[k] += precision * prior.mean[k]
  }
  const metrics = Array.from({ length: links }, (_, i) => metricOf(prior.length[i], 100 / (0.08 * prior.mass[i]) ** 2))
  for (let i = 0; i < links; i++) {
    const at = PARAMETERS_PER_LINK * i
    for (let r = 0; r < PARAMETERS_PER_LINK; r++) {
      for (let c = 0; c <= r; c++) matrix[(at + r) * size + at + c] += metrics[i][r * PARAMETERS_PER_LINK + c]
    }
  }
  factorise(matrix, size)
  const near = parameters.slice(0, inertial)
  const dual = new Float64Array(inertial)
  const pulled = new Float64Array(inertial)
  const solution = parameters.slice()
  for (let alternation = 0; alternation < mostAlternations; alternation++) {
    for (let k = 0; k < inertial; k++) pulled[k] = solution[k] + dual[k]
    for (let i = 0; i < links; i++) {
      nearestConsistent(pulled, PARAMETERS_PER_LINK * i, prior.length[i], leastShare * prior.mass[i], near)
    }
    for (let k = 0; k < inertial; k++) dual[k] = pulled[k] - near[k]
    solution.set(steady)
    for (let i = 0; i < links; i++) {
      const at = PARAMETERS_PER_LINK * i
      for (let r = 0; r < PARAMETERS_PER_LINK; r++) {
        for (let c = 0; c < PARAMETERS_PER_LINK; c++) {
          solution[at + r] += metrics[i][r * PARAMETERS_PER_LINK + c] * (near[at + c] - dual[at + c])
        }
      }
    }
    solveFactorised(matrix, size, solution)
  }
  parameters.set(solution)
  parameters.set(near)
  solveFriction({ size, information, right }, prior, held, parameters)
  return true
}

/** weight · MᵀM with M the linear map from ten parameters to the 16 entries of the pseudo-inertia. */
function metricOf(length: number, weight: number): Float64Array {
  const map = Array.from({ length: PARAMETERS_PER_LINK }, (_, k) => {
    const unit = new Float64Array(PARAMETERS_PER_LINK)
    const out = new Float64Array(16)
    unit[k] = 1
    pseudoInertia(unit, 0, length, out)
    return out
  })
  return Float64Array.from({ length: PARAMETERS_PER_LINK * PARAMETERS_PER_LINK }, (_, at) => {
    const one = map[Math.floor(at / PARAMETERS_PER_LINK)]
    const other = map[at % PARAMETERS_PER_LINK]
    let sum = 0
    for (let e = 0; e < 16; e++) sum += one[e] * other[e]
    return weight * sum
  })
}

/** Solves for offsets and friction alone, the inertial parameters as they stand. */
function solveFriction({ size, information, right }: System, prior: Prior, held: Uint8Array, parameters: Float64Array): void {
  const inertial = PARAMETERS_PER_LINK * prior.mass.length
  const count = size - inertial
  const matrix = new Float64Array(count * count)
  const solution = new Float64Array(count)
  for (let r = 0; r < count; r++) {
    const row = (inertial + r) * size
    for (let c = 0; c <= r; c++) matrix[r * count + c] = information[row + inertial + c]
    matrix[r * count + r] += precisionOf(prior, held, inertial + r)
    solution[r] = right[inertial + r]
    for (let c = 0; c < inertial; c++) solution[r] -= information[row + c] * parameters[c]
  }
  factorise(matrix, count)
  solveFactorised(matrix, count, solution)
  for (let r = 0; r < count; r++) parameters[inertial + r] = r % FRICTION_COLUMNS === 0 ? solution[r] : Math.max(solution[r], 0)
}

function residualVariance(data: Data, speeds: readonly FrictionSpeeds[], parameters: Float64Array): Float64Array {
  const inertial = PARAMETERS_PER_LINK * data.joints
  const columns = new Float64Array(FRICTION_COLUMNS)
  return Float64Array.from({ length: data.joints }, (_, j) => {
    const y = data.regressors[j]
    let sum = 0
    for (let row = 0; row < data.rows; row++) {
      let left = data.torque[j][row]
      for (let c = PARAMETERS_PER_LINK * j; c < inertial; c++) left -= y[row * inertial + c] * parameters[c]
      frictionColumns(data.velocity[j][row], speeds[j], columns, 0)
      for (let k = 0; k < FRICTION_COLUMNS; k++) left -= columns[k] * parameters[inertial + FRICTION_COLUMNS * j + k]
      sum += left * left
    }
    // A torque that is explained to the last digit must not outweigh everything else.
    return Math.max(sum / data.rows, 1e-8 * data.torqueVariance[j])
  })
}

const inertialNames = [
  'mass', 'first_moment_x', 'first_moment_y', 'first_moment_z',
  'inertia_xx', 'inertia_xy', 'inertia_xz', 'inertia_yy', 'inertia_yz', 'inertia_zz',
] as const
const frictionNames = ['offset', 'viscous', 'coulomb', 'stribeck'] as const

function report(
  chain: ChainDescription, motions: readonly Motion[], prior: Prior, speeds: readonly FrictionSpeeds[], system: System,
  parameters: Float64Array, held: Uint8Array, constrained: boolean,
): Identification {
  const { size, information } = system
  const joints = chain.joints.length
  const inertial = PARAMETERS_PER_LINK * joints
  const matrix = information.slice()
  for (let k = 0; k < size; k++) matrix[k * size + k] += precisionOf(prior, held, k)
  factorise(matrix, size)
  const variances = inverseDiagonal(matrix, size)
  const known = variances.map((variance, k) => Math.sqrt(variance) / prior.deviation[k])
  const value = (at: number, name: IdentifiedParameter['name'], joint: ChainJoint, unit: string): IdentifiedParameter => ({
    joint: joint.name, name, unit, prior: prior.mean[at], value: parameters[at], standardDeviation: Math.sqrt(variances[at]),
    identifiable: !held[at] && known[at] <= 0.5,
  })
  const listed = chain.joints.flatMap((joint, i) => [
    ...inertialNames.map((name, k) => value(PARAMETERS_PER_LINK * i + k, name, joint, k === 0 ? 'kg' : k < 4 ? 'kg·m' : 'kg·m²')),
    ...frictionNames.map((name, k) => value(inertial + FRICTION_COLUMNS * i + k, name, joint, frictionUnit(joint, name))),
  ])
  const base = baseOf(chain, speeds, parameters)
  const still: JointFriction = { viscous: 0, coulomb: 0, stribeck: 0, stribeckVelocity: 1, smoothing: 1 }
  const described = { chain, offsets: new Array<number>(joints).fill(0), friction: new Array<JointFriction>(joints).fill(still) }
  return {
    base,
    parameters: listed,
    beforePerJoint: errorsPerJoint(described, motions),
    afterPerJoint: errorsPerJoint(base, motions),
    ...spectrumOf(information, prior, size),
    consistent: base.chain.joints.every(joint => inertialFaults(joint.inertial).length === 0),
    constrained,
  }
}

function frictionUnit({ kind }: ChainJoint, name: (typeof frictionNames)[number]): string {
  if (kind === 'prismatic') return name === 'viscous' ? 'N·s/m' : 'N'
  return name === 'viscous' ? 'N·m·s/rad' : 'N·m'
}

function baseOf(chain: ChainDescription, speeds: readonly FrictionSpeeds[], parameters: Float64Array): IdentifiedBase {
  const inertial = PARAMETERS_PER_LINK * chain.joints.length
  const own = (j: number) => inertial + FRICTION_COLUMNS * j
  return {
    chain: {
      ...chain,
      joints: chain.joints.map((joint, i) => ({
        ...joint, inertial: inertialFromParameters(parameters, PARAMETERS_PER_LINK * i) satisfies Inertial,
      })),
    },
    offsets: speeds.map((_, j) => parameters[own(j)]),
    friction: speeds.map((speed, j) => ({
      viscous: parameters[own(j) + 1], coulomb: parameters[own(j) + 2], stribeck: parameters[own(j) + 3], ...speed,
    })),
  }
}

/** Root mean square error per joint over all rows of the motions, N·m (sliding: N). */
export function errorsPerJoint(base: IdentifiedBase, motions: readonly Motion[]): number[] {
  const evaluator = createRigidBodyEvaluator(base)
  const { joints } = evaluator
  const squares = new Float64Array(joints)
  let count = 0
  for (const { rows, states, torque } of motions) {
    const predicted = new Float64Array(rows * joints)
    evaluator.evaluate(states, rows, predicted)
    for (let k = 0; k < predicted.length; k++) squares[k % joints] += (torque[k] - predicted[k]) ** 2
    count += rows
  }
  return Array.from(squares, sum => Math.sqrt(sum / count))
}

/** Eigenvalues of the data's information in units of the prior: above 3 the data halve the prior's standard deviation. */
function spectrumOf(information: Float64Array, prior: Prior, size: number): { rank: number; conditioning: number } {
  const matrix = new Float64Array(size * size)
  for (let r = 0; r < size; r++) {
    for (let c = 0; c <= r; c++) {
      matrix[r * size + c] = matrix[c * size + r] = information[r * size + c] * prior.deviation[r] * prior.deviation[c]
    }
  }
  symmetricEigen(matrix, size, new Float64Array(size * size))
  const values = Array.from({ length: size }, (_, k) => matrix[k * size + k]).filter(value => value > 3)
  return { rank: values.length, conditioning: values.length === 0
    ? Infinity
    : Math.sqrt(Math.max(...values) / Math.min(...values)) }
}

/**
 * Times the SIMD kernels beside the double-precision reference and beside a plain 512 × 512 product of Float64Arrays, in
 * interleaved rounds of one process, and prints medians of processor time. A measurement, not a test.
 *
 *   npx tsx tests/load/kernels.ts [--rounds 9]
 */
import { parseArgs } from 'node:util'
import { fitCoverage } from '../../shared/dynamics/coverage.ts'
import { createKernels } from '../../shared/dynamics/kernels/kernels.ts'
import { createKernelMetaGradient } from '../../shared/dynamics/kernels/meta-gradient.ts'
import { lossKinds, type LossShape } from '../../shared/dynamics/losses/index.ts'
import { createMetaGradient, type ChainShape } from '../../shared/dynamics/meta-gradient.ts'
import {
  backward, createNetworkPass, forward, initialParameters, parameterCount, type NetworkShape,
} from '../../shared/dynamics/network.ts'
import { createRandom } from '../../shared/dynamics/random.ts'

const { values: options } = parseArgs({ options: { rounds: { type: 'string', default: '9' } } })
const rounds = Number(options.rounds)

const joints = 7
const inputs = 3 * joints
const shape: NetworkShape = { sizes: [inputs, 64, 64, joints], activation: 'relu' }
const tanhShape: NetworkShape = { ...shape, activation: 'tanh' }
const lossShape: LossShape = { joints, inputs, hidden: 32, positive: 'exp' }
const random = createRandom(1)
const values = (count: number) => Float64Array.from({ length: count }, () => 2 * random.uniform() - 1)

const kernels = createKernels()
const theta = initialParameters(shape, random)
const phi = lossKinds.state_dependent.initialParameters(lossShape, random)
const relu = kernels.loadNetwork(shape, theta)
const tanh = kernels.loadNetwork(tanhShape, theta)
const loss = kernels.loadLoss('state_dependent', lossShape, phi)
const normalisation = kernels.loadNormalisation({
  inputMean: values(inputs), inputStd: values(inputs).map((value) => 2 + value),
  outputMean: values(joints), outputStd: values(joints).map((value) => 2 + value),
})

const coverage = kernels.loadCoverage(fitCoverage(values(300 * inputs), 300, inputs))

/** name, calls in a round, what one call does. */
interface Timed {
  readonly name: string
  readonly calls: number
  readonly run: () => void
}

function evaluations(rows: number): Timed[] {
  const calls = Math.ceil(4000 / rows)
  const x = values(rows * inputs)
  const single = Float32Array.from(x)
  const motion = { position: values(rows * joints), velocity: values(rows * joints), acceleration: values(rows * joints) }
  const torque = new Float64Array(rows * joints)
  const y = new Float32Array(rows * joints)
  const cover = { coverage, out: new Float64Array(rows) }
  const exact = new Float64Array(rows * joints)
  const pass = createNetworkPass(shape, rows)
  const tanhPass = createNetworkPass(tanhShape, rows)
  return [
    { name: `forward ${rows} relu`, calls, run: () => kernels.forward(relu, single, rows, y) },
    { name: `forward ${rows} tanh`, calls, run: () => kernels.forward(tanh, single, rows, y) },
    { name: `predict ${rows} relu`, calls, run: () => kernels.predict(relu, normalisation, motion, rows, torque) },
    { name: `predict ${rows} tanh`, calls, run: () => kernels.predict(tanh, normalisation, motion, rows, torque) },
    {
      name: `predict ${rows} relu, coverage`,
      calls,
      run: () => kernels.predict(relu, normalisation, motion, rows, torque, cover),
    },
    { name: `reference forward ${rows} relu`, calls, run: () => forward(pass, theta, x, rows, exact) },
    { name: `reference forward ${rows} tanh`, calls, run: () => forward(tanhPass, theta, x, rows, exact) },
  ]
}

function steps(): Timed[] {
  const rows = 64
  const calls = 50
  const motion = { position: values(rows * joints), velocity: values(rows * joints), acceleration: values(rows * joints) }
  const torque = values(rows * joints)
  const batch = kernels.createBatch(inputs, joints)
  batch.load(normalisation, motion, torque, rows)
  const candidate = relu.clone()
  const tanhCandidate = tanh.clone()
  const moments = kernels.createMoments(candidate)
  const squares = new Float64Array(joints)
  const settings = { scheme: 'all', rate: 1e-6 } as const
  const whole = { ...settings, rowsPerStep: 64 }
  const fours = { ...settings, rowsPerStep: 4 }
  const x = values(rows * inputs)
  const [measured, predicted, slope] = [1, 2, 3].map(() => values(rows * joints))
  const pass = createNetworkPass(shape, rows)
  const exactLoss = lossKinds.state_dependent.create(lossShape, rows)
  const gradient = new Float64Array(parameterCount(shape))
  const exactTheta = theta.slice()
  return [
    { name: 'step 64 sgd relu', calls, run: () => kernels.step(candidate, loss, batch, whole) },
    { name: 'step 64 sgd tanh', calls, run: () => kernels.step(tanhCandidate, loss, batch, whole) },
    { name: 'step 64 adam relu', calls, run: () => kernels.step(candidate, loss, batch, { ...whole, moments }) },
    { name: '16 steps of 4 sgd relu', calls, run: () => kernels.step(candidate, loss, batch, fours) },
    { name: '16 steps of 4 adam relu', calls, run: () => kernels.step(candidate, loss, batch, { ...fours, moments }) },
    { name: 'one step of 4 sgd relu', calls, run: () => kernels.step(candidate, loss, batch, { ...fours, to: 4 }) },
    { name: 'load 64', calls, run: () => batch.load(normalisation, motion, torque, rows) },
    { name: 'errors 64', calls, run: () => kernels.errors(candidate, batch, {}, squares) },
    { name: 'copy of a network', calls, run: () => candidate.copyFrom(relu) },
    { name: 'distance', calls, run: () => kernels.distance(candidate, relu) },
    {
      name: 'reference step 64 sgd relu',
      calls: 5,
      run: () => {
        forward(pass, exactTheta, x, rows, predicted)
        exactLoss.gradient(phi, { rows, x, measured, predicted }, slope)
        backward(pass, exactTheta, slope, 0, gradient)
        for (let k = 0; k < gradient.length; k++) exactTheta[k] -= 1e-6 * gradient[k]
      },
    },
  ]
}

function outerUpdates(): Timed[] {
  const chain: ChainShape = {
    scheme: 'all', network: shape, loss: 'state_dependent', lossShape, steps: 15, rowsPerStep: 4,
  }
  const rows = 16 * 4
  const streams = Array.from({ length: 8 }, () => ({
    stretch: { x: values(rows * inputs), measured: values(rows * joints), base: new Float64Array(0), ahead: new Float64Array(0) },
    adapted: theta.slice(),
  }))
  const learned = Float64Array.from([...phi, Math.log(0.01)])
  const gradient = new Float64Array(learned.length)
  const chains = { 'outer update': createKernelMetaGradient(kernels, chain), 'reference outer update': createMetaGradient(chain) }
  return Object.entries(chains).map(([name, meta]) => ({
    name,
    calls: 1,
    run: () => {
      for (const { stretch, adapted } of streams) {
        adapted.set(theta)
        meta.compute(stretch, adapted, learned, gradient)
      }
    },
  }))
}

function product(): Timed {
  const n = 512
  const [a, b, c] = [values(n * n), values(n * n), new Float64Array(n * n)]
  return {
    name: '512 × 512 product',
    calls: 1,
    run: () => {
      c.fill(0)
      for (let i = 0; i < n; i++) {
        for (let k = 0; k < n; k++) {
          const aik = a[i * n + k]
          for (let j = 0; j < n; j++) c[i * n + j] += aik * b[k * n + j]
        }
      }
    },
  }
}

const timed = [...[1, 64, 1024].flatMap(evaluations), ...steps(), ...outerUpdates(), product()]
for (const { run, calls } of timed) for (let call = 0; call < calls; call++) run()
const times = new Map(timed.map(({ name }) => [name, [] as number[]]))
for (let round = 0; round < rounds; round++) {
  for (const { name, calls, run } of timed) {
    const start = process.cpuUsage()
    for (let call = 0; call < calls; call++) run()
    // Processor time: what others run on a shared machine stays out of it.
    times.get(name)!.push(process.cpuUsage(start).user / calls)
  }
}
const median = (name: string) => times.get(name)!.sort((a, b) => a - b)[rounds >> 1]
for (const { name } of timed) {
  const factor = times.has(`reference ${name}`) ? (median(`reference ${name}`) / median(name)).toFixed(1) : undefined
  const reference = factor === undefined ? '' : `   ${factor} × faster than the reference`
  console.log(`${name.padEnd(30)} ${median(name).toFixed(2).padStart(11)} µs${reference}`)
}
const ratio = (name: string) => (median(name) / median('512 × 512 product')).toFixed(4)
console.log(`outer update ÷ 512 × 512 product: ${ratio('outer update')} (reference: ${ratio('reference outer update')})`)

// Sources: tfjs 4.22's automatic differentiation, first order everywhere, second order in the forms it differentiates twice
// correctly (relu; softplus; tanh as sinh / cosh; its issue 3252 lists those it cannot); the Hessian-vector product of
// Pearlmutter, Fast exact multiplication by the Hessian (1994), on f = w1² w2 + w2³ at (1, 2) along (3, −1), which is (10, −6).
import * as tf from '@tensorflow/tfjs'
import { beforeAll, expect, test } from 'vitest'
import { lossKinds, type LossName, type LossShape } from '../../shared/dynamics/losses/index.ts'
import { createMetaGradient } from '../../shared/dynamics/meta-gradient.ts'
import {
  addBackwardTangent, backward, createNetworkPass, forward, forwardTangent, initialParameters, type Activation, type NetworkShape,
} from '../../shared/dynamics/network.ts'
import { createRandom } from '../../shared/dynamics/random.ts'

beforeAll(async () => {
  await tf.setBackend('cpu')
})

const joints = 2
const inputs = 6
const rows = 4
const rate = 0.1
const sizes = [inputs, 7, joints]
const lossShape: LossShape = { joints, inputs, hidden: 4, positive: 'softplus' }

// tfjs computes in float32: sums of some hundred terms of order 1 keep about five digits.
const tolerance = 3e-5

/** The hyperbolic tangent in a form that tfjs differentiates twice. */
const tanh = (x: tf.Tensor) => tf.div(tf.sinh(x), tf.cosh(x))

const activations: Record<Activation, (x: tf.Tensor) => tf.Tensor> = { relu: x => tf.relu(x), tanh }

function theirNetwork(activation: Activation, theta: tf.Tensor[], x: tf.Tensor): tf.Tensor {
  const [w1, b1, w2, b2] = theta
  return tf.add(tf.matMul(activations[activation](tf.add(tf.matMul(x, w1), b1)), w2), b2)
}

function theirLoss(loss: LossName, phi: tf.Tensor[], x: tf.Tensor, measured: tf.Tensor, predicted: tf.Tensor): tf.Scalar {
  const squares = tf.square(tf.sub(measured, predicted))
  if (loss === 'mse') return tf.mean(squares)
  if (loss === 'structured') return tf.mean(tf.mul(tf.softplus(phi[0]), squares))
  const [v1, c1, v2, c2] = phi
  const net = (input: tf.Tensor) => tf.softplus(tf.add(tf.matMul(tanh(tf.add(tf.matMul(input, v1), c1)), v2), c2))
  if (loss === 'state_dependent') return tf.mean(tf.mul(net(x), squares))
  return tf.mean(net(tf.concat([measured, predicted], 1)))
}

const phiSizes: Record<LossName, number[][]> = {
  mse: [],
  structured: [[joints]],
  state_dependent: [[inputs, 4], [4], [4, joints], [joints]],
  unstructured: [[2 * joints, 4], [4], [4, 1], [1]],
}

function split(flat: Float64Array, shapes: number[][]): tf.Tensor[] {
  let at = 0
  return shapes.map((shape) => {
    const count = shape.reduce((product, size) => product * size, 1)
    at += count
    return tf.tensor(Float32Array.from(flat.subarray(at - count, at)), shape)
  })
}

function createCase(loss: LossName, activation: Activation) {
  const random = createRandom(21)
  const normals = (count: number) => Float64Array.from({ length: count }, () => random.normal())
  const network: NetworkShape = { sizes, activation }
  const kind = lossKinds[loss]
  return {
    network,
    theta: initialParameters(network, random),
    phi: kind.initialParameters(lossShape, random).map(value => value + 0.3 * random.normal()),
    stretch: {
      x: normals(2 * rows * inputs), measured: normals(2 * rows * joints), base: new Float64Array(0), ahead: new Float64Array(0),
    },
  }
}

const thetaSizes = [[inputs, 7], [7], [7, joints], [joints]]

const cases = (Object.keys(lossKinds) as LossName[]).flatMap(loss =>
  (['relu', 'tanh'] as const).map(activation => ({ loss, activation })))

test.each(cases)('the gradient of a network under $loss, $activation, agrees with tfjs', ({ loss, activation }) => {
  const { network, theta, phi, stretch } = createCase(loss, activation)
  const pass = createNetworkPass(network, rows)
  const predicted = new Float64Array(rows * joints)
  const slope = new Float64Array(rows * joints)
  const gradient = new Float64Array(theta.length)

  forward(pass, theta, stretch.x, rows, predicted)
  const given = { rows, x: stretch.x, measured: stretch.measured, predicted }
  lossKinds[loss].create(lossShape, rows).gradient(phi, given, slope)
  backward(pass, theta, slope, 0, gradient)

  const { x, measured } = theirBatches(stretch)
  const lossOf = (...values: tf.Tensor[]) =>
    theirLoss(loss, split(phi, phiSizes[loss]), x[0], measured[0], theirNetwork(activation, values, x[0]))
  const theirs = tf.grads(lossOf)(split(theta, thetaSizes))
  expectClose(gradient, theirs)
})

test.each(cases.filter(({ loss }) => loss !== 'mse'))(
  'the hypergradient of $loss, $activation, through one step agrees with tfjs, differentiated twice', ({ loss, activation }) => {
    const { network, theta, phi, stretch } = createCase(loss, activation)
    const meta = createMetaGradient({ scheme: 'all', network, loss, lossShape, steps: 1, rowsPerStep: rows })
    const gradient = new Float64Array(meta.learnedCount)

    meta.compute(stretch, theta.slice(), Float64Array.from([...phi, Math.log(rate)]), gradient)

    const { x, measured } = theirBatches(stretch)
    const outer = (...phiValues: tf.Tensor[]) => {
      const inner = tf.grads((...values: tf.Tensor[]) =>
        theirLoss(loss, phiValues, x[0], measured[0], theirNetwork(activation, values, x[0])))
      const start = split(theta, thetaSizes)
      const stepped = inner(start).map((slope, k) => tf.sub(start[k], tf.mul(rate, slope)))
      return tf.mean(tf.square(tf.sub(measured[1], theirNetwork(activation, stepped, x[1])))) as tf.Scalar
    }
    expectClose(gradient.subarray(0, phi.length), tf.grads(outer)(split(phi, phiSizes[loss])))
  },
)

test('the Hessian-vector product agrees with differences of the gradient, and with its symmetry', () => {
  const { network, theta, stretch } = createCase('mse', 'tanh')
  const random = createRandom(4)
  const directions = [0, 1].map(() => Float64Array.from(theta, () => random.normal()))

  const [first, second] = directions.map(direction => hessianProduct(network, theta, stretch, direction))

  // Central differences of a double-precision gradient with step 1e-5 keep about eight digits.
  const step = 1e-5
  const above = meanSquareGradient(network, theta.map((value, k) => value + step * directions[0][k]), stretch)
  const below = meanSquareGradient(network, theta.map((value, k) => value - step * directions[0][k]), stretch)
  for (let k = 0; k < theta.length; k++) expect(Math.abs(first[k] - (above[k] - below[k]) / (2 * step))).toBeLessThan(1e-7)
  // u · H v = v · H u, exact but for rounding.
  expect(Math.abs(dot(directions[1], first) - dot(directions[0], second))).toBeLessThan(1e-12)
})

test('the published Hessian-vector product comes out, and one by hand through two layers', () => {
  // One layer, x = 1, y = (w1, w2): L = y1² y2 + y2³.
  const [w1, w2] = [1, 2]
  const published = hessianProductOf({ sizes: [1, 2], activation: 'relu' }, [w1, w2, 0, 0], [3, -1, 0, 0],
    () => [2 * w1 * w2, w1 * w1 + 3 * w2 * w2], ([a, b]) => [2 * w2 * a + 2 * w1 * b, 2 * w1 * a + 6 * w2 * b])
  // Two layers u = 1, v = 2, x = 1, y = u v, L = y³ = u³ v³:
  // Hessian [[6 u v³, 9 u² v²], [9 u² v², 6 u³ v]] = [[48, 36], [36, 12]].
  const byHand = hessianProductOf({ sizes: [1, 1, 1], activation: 'relu' }, [1, 0, 2, 0], [3, 0, -1, 0],
    ([y]) => [3 * y * y], ([tangent]) => [6 * 2 * tangent])

  expect([published[0], published[1]]).toEqual([10, -6])
  expect([byHand[0], byHand[2]]).toEqual([108, 96])
})

function hessianProductOf(
  network: NetworkShape, theta: number[], direction: number[],
  slope: (y: Float64Array) => number[], slopeTangent: (tangent: Float64Array) => number[],
): Float64Array {
  const pass = createNetworkPass(network, 1)
  const parameters = Float64Array.from(theta)
  const y = new Float64Array(network.sizes.at(-1)!)
  const tangent = new Float64Array(y.length)
  const product = new Float64Array(theta.length)
  forward(pass, parameters, Float64Array.of(1), 1, y)
  backward(pass, parameters, Float64Array.from(slope(y)), 0, new Float64Array(theta.length))
  forwardTangent(pass, parameters, Float64Array.from(direction), 0, tangent)
  const moved = Float64Array.from(slopeTangent(tangent))
  addBackwardTangent(pass, parameters, Float64Array.from(direction), moved, 0, 1, undefined, product)
  return product
}

interface Rows {
  readonly x: Float64Array
  readonly measured: Float64Array
}

function theirBatches({ x, measured }: Rows) {
  const batch = (table: Float64Array, t: number, columns: number) =>
    tf.tensor2d(Float32Array.from(table.subarray(t * rows * columns, (t + 1) * rows * columns)), [rows, columns])
  return { x: [0, 1].map(t => batch(x, t, inputs)), measured: [0, 1].map(t => batch(measured, t, joints)) }
}

function meanSquareGradient(network: NetworkShape, theta: Float64Array, { x, measured }: Rows): Float64Array {
  const pass = createNetworkPass(network, rows)
  const predicted = new Float64Array(rows * joints)
  const slope = new Float64Array(rows * joints)
  const gradient = new Float64Array(theta.length)
  forward(pass, theta, x, rows, predicted)
  lossKinds.mse.create(lossShape, rows).gradient(new Float64Array(0), { rows, x, measured, predicted }, slope)
  backward(pass, theta, slope, 0, gradient)
  return gradient
}

function hessianProduct(
  network: NetworkShape, theta: Float64Array, { x, measured }: Rows, direction: Float64Array,
): Float64Array {
  const pass = createNetworkPass(network, rows)
  const loss = lossKinds.mse.create(lossShape, rows)
  const predicted = new Float64Array(rows * joints)
  const slope = new Float64Array(rows * joints)
  const tangent = new Float64Array(rows * joints)
  const slopeTangent = new Float64Array(rows * joints)
  const product = new Float64Array(theta.length)
  forward(pass, theta, x, rows, predicted)
  const given = { rows, x, measured, predicted }
  loss.gradient(new Float64Array(0), given, slope)
  backward(pass, theta, slope, 0, new Float64Array(theta.length))
  forwardTangent(pass, theta, direction, 0, tangent)
  loss.secondOrder(new Float64Array(0), given, tangent, slopeTangent, 0, new Float64Array(0))
  addBackwardTangent(pass, theta, direction, slopeTangent, 0, 1, undefined, product)
  return product
}

function dot(a: Float64Array, b: Float64Array): number {
  return a.reduce((sum, value, k) => sum + value * b[k], 0)
}

function expectClose(found: Float64Array, theirs: tf.Tensor[]): void {
  const wanted = theirs.flatMap(tensor => [...tensor.dataSync()])
  expect(found.length).toBe(wanted.length)
  for (let k = 0; k < wanted.length; k++) expect(Math.abs(found[k] - wanted[k])).toBeLessThan(tolerance)
  expect(Math.max(...wanted.map(Math.abs))).toBeGreaterThan(1e-3)
}

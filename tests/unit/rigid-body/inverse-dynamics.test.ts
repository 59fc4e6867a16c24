import { describe, expect, it } from 'vitest'
import { createRandom } from '../../../shared/dynamics/random.ts'
import {
  attachPayload,
  createChain,
  detachPayload,
  forwardDynamics,
  frictionTorque,
  gravityTorque,
  inertialFromParameters,
  inertialRegressor,
  inverseDynamics,
  inverseDynamicsTerms,
  massMatrix,
  payloadRegressor,
} from '../../../shared/dynamics/rigid-body/index.ts'
import { ShapeError } from '../../../shared/dynamics/shape-error.ts'
import { exampleChain, vector } from './example-chain.ts'

// A few hundred double-precision operations on torques up to 100 N·m.
const ROUNDING = 1e-11
const n = 6

describe('inverse dynamics', () => {
  it('splits torque into inertia, Coriolis and gravity that add up to the whole', () => {
    const chain = createChain(exampleChain())
    const random = createRandom(2)
    const [q, qd, qdd] = [vector(random, n, 2), vector(random, n, 2), vector(random, n, 3)]
    const whole = new Float64Array(n)
    const terms = { inertia: new Float64Array(n), coriolis: new Float64Array(n), gravity: new Float64Array(n) }
    inverseDynamics(chain, q, qd, qdd, whole)
    inverseDynamicsTerms(chain, q, qd, qdd, terms)

    expectClose(
      whole.map((value, i) => value - terms.inertia[i] - terms.coriolis[i] - terms.gravity[i]),
      new Float64Array(n),
    )
    const still = new Float64Array(n)
    gravityTorque(chain, q, still)
    expect(still).toEqual(terms.gravity)
  })

  it('loses no energy: motor power minus the rise of kinetic energy is the work against gravity', () => {
    const chain = createChain({ ...exampleChain(), gravity: [0, 0, 0] })
    const random = createRandom(3)
    const [q, qd, qdd] = [vector(random, n, 2), vector(random, n, 2), vector(random, n, 3)]
    const tau = new Float64Array(n)
    inverseDynamics(chain, q, qd, qdd, tau)
    const power = tau.reduce((sum, value, i) => sum + value * qd[i], 0)

    const h = 1e-5
    const along = (t: number): number =>
      kineticEnergy(
        q.map((value, i) => value + t * qd[i] + 0.5 * t * t * qdd[i]),
        qd.map((value, i) => value + t * qdd[i]),
      )
    // Central differences of step 1e-5 err by about 1e-9 of a quantity near 100.
    expect(Math.abs((along(h) - along(-h)) / (2 * h) - power)).toBeLessThan(1e-6)

    function kineticEnergy(position: Float64Array, velocity: Float64Array): number {
      const matrix = new Float64Array(n * n)
      massMatrix(chain, position, matrix)
      let sum = 0
      for (let i = 0; i < n; i++) for (let j = 0; j < n; j++) sum += 0.5 * velocity[i] * matrix[n * i + j] * velocity[j]
      return sum
    }
  })

  it('has a symmetric, positive definite mass matrix everywhere', () => {
    const chain = createChain(exampleChain())
    const random = createRandom(4)
    for (let state = 0; state < 50; state++) {
      const q = vector(random, n, 3)
      const direction = vector(random, n, 1)
      const matrix = new Float64Array(n * n)
      massMatrix(chain, q, matrix)

      let energy = 0
      for (let i = 0; i < n; i++) {
        for (let j = 0; j < n; j++) {
          expect(matrix[n * i + j]).toBe(matrix[n * j + i])
          energy += direction[i] * matrix[n * i + j] * direction[j]
        }
      }
      expect(energy).toBeGreaterThan(0)
    }
  })

  it('is undone by forward dynamics', () => {
    const chain = createChain(exampleChain())
    const random = createRandom(5)
    const [q, qd, qdd] = [vector(random, n, 2), vector(random, n, 2), vector(random, n, 3)]
    const tau = new Float64Array(n)
    const found = new Float64Array(n)
    inverseDynamics(chain, q, qd, qdd, tau)
    forwardDynamics(chain, q, qd, tau, found)

    expectClose(found, qdd, 1e-9)
  })

  it('refuses a vector of the wrong length, naming it', () => {
    const chain = createChain(exampleChain())
    const right = new Float64Array(n)

    expect(() => inverseDynamics(chain, right, new Float64Array(5), right, right)).toThrow(ShapeError)
    expect(() => inverseDynamics(chain, right, new Float64Array(5), right, right)).toThrow(/qd has 5 values, expected 6/)
  })

  const chain = createChain(exampleChain())
  const random = createRandom(6)
  const [q, qd, qdd, tau] = [vector(random, n, 2), vector(random, n, 2), vector(random, n, 3), new Float64Array(n)]
  const [columns, all, matrix] = [new Float64Array(4 * n), new Float64Array(10 * n * n), new Float64Array(n * n)]
  const terms = { inertia: new Float64Array(n), coriolis: new Float64Array(n), gravity: new Float64Array(n) }
  const evaluations: [string, () => void][] = [
    ['inverse dynamics', () => inverseDynamics(chain, q, qd, qdd, tau)],
    ['inverse dynamics by terms', () => inverseDynamicsTerms(chain, q, qd, qdd, terms)],
    ['gravity torque', () => gravityTorque(chain, q, tau)],
    ['mass matrix', () => massMatrix(chain, q, matrix)],
    ['forward dynamics', () => forwardDynamics(chain, q, qd, qdd, tau)],
    ['the payload regressor', () => payloadRegressor(chain, q, qd, qdd, columns)],
    ['the regressor of all parameters', () => inertialRegressor(chain, q, qd, qdd, all)],
  ]
  for (const [what, evaluate] of evaluations) {
    it(`allocates nothing per evaluation: ${what}`, () => {
      // Few enough that what they would allocate is not collected meanwhile; the median, because others allocate too.
      const count = 5000
      const run = (times: number): void => {
        for (let k = 0; k < times; k++) evaluate()
      }
      run(4 * count)
      const grown = Array.from({ length: 9 }, () => {
        const before = process.memoryUsage().heapUsed
        run(count)
        return process.memoryUsage().heapUsed - before
      }).sort((a, b) => a - b)

      // A single boxed number is 12 bytes or more.
      expect(grown[4] / count).toBeLessThan(8)
    })
  }
})

describe('a payload', () => {
  it('changes torque while attached, and leaves no trace to the bit once detached', () => {
    const chain = createChain(exampleChain())
    const random = createRandom(7)
    const [q, qd, qdd] = [vector(random, n, 2), vector(random, n, 2), vector(random, n, 3)]
    const before = new Float64Array(n)
    const during = new Float64Array(n)
    const after = new Float64Array(n)
    inverseDynamics(chain, q, qd, qdd, before)
    attachPayload(chain, { mass: 1.7, centerOfMass: [0.01, 0.02, 0.1] })
    attachPayload(chain, { mass: 0.3, centerOfMass: [0.04, -0.02, 0.07], inertia: [1e-3, 0, 0, 1e-3, 0, 1e-3] })
    inverseDynamics(chain, q, qd, qdd, during)
    detachPayload(chain)
    inverseDynamics(chain, q, qd, qdd, after)

    expect(after).toEqual(before)
    expect(Math.abs(during[0] - before[0])).toBeGreaterThan(1e-3)
  })

  it('is linear in mass and first moment: the regressor gives what attaching adds, but for inertia about the flange', () => {
    const chain = createChain(exampleChain())
    const random = createRandom(8)
    const [q, qd, qdd] = [vector(random, n, 2), vector(random, n, 2), vector(random, n, 3)]
    const center = [0.03, -0.05, 0.09] as const
    const mass = 1.9
    // An inertia about the centre of mass that cancels what the offset mass has about the flange: what the regressor leaves out.
    const [x, y, z] = center
    const inertia = [-(y * y + z * z), x * y, x * z, -(x * x + z * z), y * z, -(x * x + y * y)].map((value) => mass * value)
    const [without, withIt, columns] = [new Float64Array(n), new Float64Array(n), new Float64Array(n * 4)]
    inverseDynamics(chain, q, qd, qdd, without)
    attachPayload(chain, {
      mass,
      centerOfMass: center,
      inertia: inertia as unknown as [number, number, number, number, number, number],
    })
    inverseDynamics(chain, q, qd, qdd, withIt)
    payloadRegressor(chain, q, qd, qdd, columns)

    const parameters = [mass, mass * x, mass * y, mass * z]
    const predicted = without.map((value, i) => value + parameters.reduce((sum, p, k) => sum + columns[4 * i + k] * p, 0))
    expectClose(predicted, withIt)
  })

  it('is refused when its mass is negative, and the chain stays as it was', () => {
    const chain = createChain(exampleChain())
    const before = chain.parameters.slice()

    expect(() => attachPayload(chain, { mass: -1, centerOfMass: [0, 0, 0] })).toThrow(/payload: mass is -1/)
    expect(chain.parameters).toEqual(before)
  })
})

describe('the regressor of inertial parameters', () => {
  it("times the links' parameters is the torque", () => {
    const chain = createChain(exampleChain())
    const random = createRandom(9)
    const [q, qd, qdd] = [vector(random, n, 2), vector(random, n, 2), vector(random, n, 3)]
    const tau = new Float64Array(n)
    const matrix = new Float64Array(n * 10 * n)
    inverseDynamics(chain, q, qd, qdd, tau)
    inertialRegressor(chain, q, qd, qdd, matrix)

    expectClose(
      tau.map((_, i) => chain.linkParameters.reduce((sum, p, k) => sum + matrix[10 * n * i + k] * p, 0)),
      tau,
    )
  })

  it('uses parameters that lead back to mass, centre of mass and inertia', () => {
    const description = exampleChain()
    const chain = createChain(description)
    const { mass, centerOfMass, inertia } = inertialFromParameters(chain.linkParameters, 20)

    const given = description.joints[2].inertial
    expectClose(
      Float64Array.of(mass, ...centerOfMass, ...inertia),
      Float64Array.of(given.mass, ...given.centerOfMass, ...given.inertia),
    )
  })
})

describe('friction', () => {
  it('opposes motion, breaks away above Coulomb friction and grows with speed', () => {
    const joint = { viscous: 0.5, coulomb: 2, stribeck: 1, stribeckVelocity: 0.05, smoothing: 0.005 }
    const tau = new Float64Array(4)
    frictionTorque([joint, joint, joint, joint], Float64Array.of(0, 0.02, -0.02, 2), tau)

    expect(tau[0]).toBe(0)
    expect(tau[1]).toBeGreaterThan(2.5)
    expect(tau[2]).toBe(-tau[1])
    expect(Math.abs(tau[3] - 3)).toBeLessThan(1e-12)
  })
})

function expectClose(found: Float64Array, expected: Float64Array, tolerance = ROUNDING): void {
  found.forEach((value, k) => expect(Math.abs(value - expected[k]), `${k}: ${value} for ${expected[k]}`).toBeLessThan(tolerance))
}

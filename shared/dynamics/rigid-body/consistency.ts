import type { Inertial } from './chain.ts'

/** A rule that a body with mass everywhere ≥ 0 obeys, and how a description breaks it. */
export interface InertialFault {
  readonly rule: 'finite' | 'positive_mass' | 'positive_definite' | 'triangle_inequality'
  /** What was found and what was expected, with the numbers. */
  readonly message: string
}

/**
 * Checks that a body with these inertial parameters can exist.
 *
 * @returns the rules broken, empty when consistent. After a value that is not finite nothing else is checked.
 * Source: mass positive, inertia about the centre of mass positive definite, and each principal moment at most the sum of
 * the other two (Wensing, Kim, Slotine 2018; from memory).
 */
export function inertialFaults({ mass, centerOfMass, inertia }: Inertial): InertialFault[] {
  const numbers = [mass, ...centerOfMass, ...inertia]
  if (!numbers.every(Number.isFinite)) {
    return [{ rule: 'finite', message: `mass, centre of mass and inertia must be finite numbers, found ${numbers.join(', ')}` }]
  }
  const faults: InertialFault[] = []
  if (!(mass > 0)) faults.push({ rule: 'positive_mass', message: `mass is ${mass} kg, expected above 0` })
  const [a, b, c] = principalMoments(inertia)
  const moments = `principal moments are ${[a, b, c].map((value) => value.toPrecision(4)).join(', ')} kg·m²`
  if (!(a > 0)) faults.push({ rule: 'positive_definite', message: `${moments}, expected all above 0` })
  // Room for values that were rounded to a few digits where a thin rod meets the bound exactly.
  else if (c > (a + b) * (1 + 1e-6)) {
    faults.push({
      rule: 'triangle_inequality',
      message: `${moments}: the largest is above the sum of the others, ${(a + b).toPrecision(4)}`,
    })
  }
  return faults
}

/**
 * Eigenvalues of a symmetric 3 × 3 matrix, rising.
 *
 * @param inertia  xx, xy, xz, yy, yz, zz
 * Source: cyclic Jacobi rotations (Golub & Van Loan, Matrix Computations, section 8.5).
 */
export function principalMoments([xx, xy, xz, yy, yz, zz]: Inertial['inertia']): [number, number, number] {
  const m = [xx, xy, xz, xy, yy, yz, xz, yz, zz]
  const scale = Math.abs(xx) + Math.abs(yy) + Math.abs(zz) + Math.abs(xy) + Math.abs(xz) + Math.abs(yz)
  for (let sweep = 0; sweep < 30; sweep++) {
    if (Math.abs(m[1]) + Math.abs(m[2]) + Math.abs(m[5]) <= 1e-16 * scale) break
    for (const [p, q] of [
      [0, 1],
      [0, 2],
      [1, 2],
    ])
      annihilate(m, p, q)
  }
  const [a, b, c] = [m[0], m[4], m[8]].sort((left, right) => left - right)
  return [a, b, c]
}

function annihilate(m: number[], p: number, q: number): void {
  const off = m[3 * p + q]
  if (off === 0) return
  const theta = (m[3 * q + q] - m[3 * p + p]) / (2 * off)
  const t = (theta < 0 ? -1 : 1) / (Math.abs(theta) + Math.sqrt(theta * theta + 1))
  const c = 1 / Math.sqrt(t * t + 1)
  const s = t * c
  for (let k = 0; k < 3; k++) {
    const kp = m[3 * k + p]
    const kq = m[3 * k + q]
    m[3 * k + p] = c * kp - s * kq
    m[3 * k + q] = s * kp + c * kq
  }
  for (let k = 0; k < 3; k++) {
    const pk = m[3 * p + k]
    const qk = m[3 * q + k]
    m[3 * p + k] = c * pk - s * qk
    m[3 * q + k] = s * pk + c * qk
  }
}

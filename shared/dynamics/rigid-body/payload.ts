import { PARAMETERS_PER_LINK, inertialParameters } from './chain.ts'
import type { Chain, Inertial } from './chain.ts'

/** What the flange carries, in the flange frame: mass (kg), centre of mass (m), and, if known, the inertia about it (kg·m²). */
export interface Payload {
  readonly mass: number
  readonly centerOfMass: Inertial['centerOfMass']
  /** xx, xy, xz, yy, yz, zz about the centre of mass; left out: a point mass. */
  readonly inertia?: Inertial['inertia']
}

const POINT: Inertial['inertia'] = [0, 0, 0, 0, 0, 0]

/**
 * Attaches a payload to the flange, in place of the one that was attached before. The links' own parameters are kept
 * apart, so {@link detachPayload} restores every later torque to the bit.
 *
 * @throws {RangeError} a number is not finite or the mass is negative; the chain is unchanged then
 */
export function attachPayload(chain: Chain, payload: Payload): void {
  const { flangeOrigin, flangeRotation: r } = chain
  const own = inertialParameters({ mass: payload.mass, centerOfMass: [0, 0, 0], inertia: payload.inertia ?? POINT }, 'payload')
  const [cx, cy, cz] = payload.centerOfMass
  const place = (k: number): number => flangeOrigin[k] + r[3 * k] * cx + r[3 * k + 1] * cy + r[3 * k + 2] * cz
  const added = inertialParameters(
    {
      mass: payload.mass,
      centerOfMass: [place(0), place(1), place(2)],
      inertia: rotateInertia(r, own),
    },
    'payload',
  )
  const at = PARAMETERS_PER_LINK * (chain.size - 1)
  for (let k = 0; k < PARAMETERS_PER_LINK; k++) chain.parameters[at + k] = chain.linkParameters[at + k] + added[k]
}

/** Takes the payload off: from here every torque is what it was before {@link attachPayload}, to the bit. */
export function detachPayload(chain: Chain): void {
  chain.parameters.set(chain.linkParameters)
}

// R · I · Rᵀ of the inertia in parameters 4 to 9.
function rotateInertia(r: Float64Array, parameters: Float64Array): Inertial['inertia'] {
  const inertia = [
    parameters[4],
    parameters[5],
    parameters[6],
    parameters[5],
    parameters[7],
    parameters[8],
    parameters[6],
    parameters[8],
    parameters[9],
  ]
  const entry = (row: number, column: number): number => {
    let sum = 0
    for (let j = 0; j < 3; j++) for (let k = 0; k < 3; k++) sum += r[3 * row + j] * inertia[3 * j + k] * r[3 * column + k]
    return sum
  }
  return [entry(0, 0), entry(0, 1), entry(0, 2), entry(1, 1), entry(1, 2), entry(2, 2)]
}

import { checkLength } from '../shape-error.ts'
import { PARAMETERS_PER_LINK } from './chain.ts'
import type { Chain } from './chain.ts'
import { moveLinks, placeLinks, requireState } from './inverse-dynamics.ts'

/** Parameters of a payload that torque is linear in, its own inertia left out: m, m·cx, m·cy, m·cz, in the flange frame. */
export const PAYLOAD_PARAMETERS = 4

/**
 * The matrix Y(q, q̇, q̈) with torque = Y · parameters, for the links' inertial parameters.
 *
 * @param chain  n joints; a payload that is attached plays no part
 * @param q      position, length n; qd, qdd: velocity and acceleration likewise
 * @param out    out, n × 10n, row-major; columns in the order of {@link Chain.linkParameters}; overwritten
 * @throws {ShapeError} a length is wrong
 * Source: Atkeson, An, Hollerbach, Estimation of Inertial Parameters of Manipulator Loads and Links (1986).
 */
export function inertialRegressor(chain: Chain, q: Float64Array, qd: Float64Array, qdd: Float64Array, out: Float64Array): void {
  requireState(chain, q, qd, qdd)
  const { size, gravity } = chain
  const columns = PARAMETERS_PER_LINK * size
  checkLength('out', out.length, size * columns, 'joints × 10 joints')
  out.fill(0)
  placeLinks(chain, q)
  moveLinks(chain, qd, qdd, gravity)
  const { wrench } = chain.work
  for (let link = 0; link < size; link++) {
    for (let parameter = 0; parameter < PARAMETERS_PER_LINK; parameter++) {
      unitWrench(chain, link, parameter, wrench)
      carryToJoints(chain, link, wrench, out, columns, PARAMETERS_PER_LINK * link + parameter)
    }
  }
}

/**
 * The matrix A(q, q̇, q̈) with payload torque = A · (m, m·cx, m·cy, m·cz), the centre of mass in the flange frame.
 *
 * The payload's inertia about the flange's origin is not linear in these four and is left out; for a compact payload on
 * a short gripper it is small beside what m and m·c do.
 *
 * @param out  out, n × 4, row-major; overwritten
 * @throws {ShapeError} a length is wrong
 * Source: Atkeson, An, Hollerbach (1986).
 */
export function payloadRegressor(chain: Chain, q: Float64Array, qd: Float64Array, qdd: Float64Array, out: Float64Array): void {
  requireState(chain, q, qd, qdd)
  const { size, gravity, flangeOrigin, flangeRotation: r } = chain
  checkLength('out', out.length, size * PAYLOAD_PARAMETERS, 'joints × 4')
  placeLinks(chain, q)
  moveLinks(chain, qd, qdd, gravity)
  const { wrench, angularVelocity: w, angularAcceleration: dw, acceleration: a } = chain.work
  const o = 3 * size
  const wx = w[o],
    wy = w[o + 1],
    wz = w[o + 2]
  const dx = dw[o],
    dy = dw[o + 1],
    dz = dw[o + 2]
  const px = flangeOrigin[0],
    py = flangeOrigin[1],
    pz = flangeOrigin[2]
  // Acceleration of the flange's origin, in the last link's frame: a + ω̇ × p + ω × (ω × p)
  const ux = wy * pz - wz * py,
    uy = wz * px - wx * pz,
    uz = wx * py - wy * px
  const ax = a[o] + dy * pz - dz * py + wy * uz - wz * uy
  const ay = a[o + 1] + dz * px - dx * pz + wz * ux - wx * uz
  const az = a[o + 2] + dx * py - dy * px + wx * uy - wy * ux
  for (let column = 0; column < PAYLOAD_PARAMETERS; column++) {
    let fx = ax,
      fy = ay,
      fz = az
    let nx = 0,
      ny = 0,
      nz = 0
    if (column > 0) {
      const ex = r[column - 1],
        ey = r[column + 2],
        ez = r[column + 5]
      const vx = wy * ez - wz * ey,
        vy = wz * ex - wx * ez,
        vz = wx * ey - wy * ex
      fx = dy * ez - dz * ey + wy * vz - wz * vy
      fy = dz * ex - dx * ez + wz * vx - wx * vz
      fz = dx * ey - dy * ex + wx * vy - wy * vx
      nx = ey * az - ez * ay
      ny = ez * ax - ex * az
      nz = ex * ay - ey * ax
    }
    wrench[0] = nx + py * fz - pz * fy
    wrench[1] = ny + pz * fx - px * fz
    wrench[2] = nz + px * fy - py * fx
    wrench[3] = fx
    wrench[4] = fy
    wrench[5] = fz
    carryToJoints(chain, size - 1, wrench, out, PAYLOAD_PARAMETERS, column)
  }
}

// Moment (0–2) and force (3–5) about the link's origin that one unit of a parameter causes in the present motion.
function unitWrench(chain: Chain, link: number, parameter: number, wrench: Float64Array): void {
  const { angularVelocity: w, angularAcceleration: dw, acceleration: a } = chain.work
  const o = 3 * link + 3
  const wx = w[o],
    wy = w[o + 1],
    wz = w[o + 2]
  const dx = dw[o],
    dy = dw[o + 1],
    dz = dw[o + 2]
  const ax = a[o],
    ay = a[o + 1],
    az = a[o + 2]
  let nx = 0,
    ny = 0,
    nz = 0
  let fx = 0,
    fy = 0,
    fz = 0
  if (parameter === 0) {
    fx = ax
    fy = ay
    fz = az
  } else if (parameter < 4) {
    const ex = parameter === 1 ? 1 : 0,
      ey = parameter === 2 ? 1 : 0,
      ez = parameter === 3 ? 1 : 0
    const ux = wy * ez - wz * ey,
      uy = wz * ex - wx * ez,
      uz = wx * ey - wy * ex
    fx = dy * ez - dz * ey + wy * uz - wz * uy
    fy = dz * ex - dx * ez + wz * ux - wx * uz
    fz = dx * ey - dy * ex + wx * uy - wy * ux
    nx = ey * az - ez * ay
    ny = ez * ax - ex * az
    nz = ex * ay - ey * ax
  } else {
    const xx = parameter === 4 ? 1 : 0,
      xy = parameter === 5 ? 1 : 0,
      xz = parameter === 6 ? 1 : 0
    const yy = parameter === 7 ? 1 : 0,
      yz = parameter === 8 ? 1 : 0,
      zz = parameter === 9 ? 1 : 0
    const lx = xx * wx + xy * wy + xz * wz,
      ly = xy * wx + yy * wy + yz * wz,
      lz = xz * wx + yz * wy + zz * wz
    nx = xx * dx + xy * dy + xz * dz + wy * lz - wz * ly
    ny = xy * dx + yy * dy + yz * dz + wz * lx - wx * lz
    nz = xz * dx + yz * dy + zz * dz + wx * ly - wy * lx
  }
  wrench[0] = nx
  wrench[1] = ny
  wrench[2] = nz
  wrench[3] = fx
  wrench[4] = fy
  wrench[5] = fz
}

// Writes what every joint up to `link` feels of a wrench on that link into one column of `out`; joints after it feel nothing.
function carryToJoints(
  chain: Chain,
  link: number,
  wrench: Float64Array,
  out: Float64Array,
  columns: number,
  column: number,
): void {
  const { slides, axis } = chain
  const { rotation, offset } = chain.work
  let nx = wrench[0],
    ny = wrench[1],
    nz = wrench[2]
  let fx = wrench[3],
    fy = wrench[4],
    fz = wrench[5]
  for (let i = link; i >= 0; i--) {
    const b = 3 * i
    const ex = axis[b],
      ey = axis[b + 1],
      ez = axis[b + 2]
    out[columns * i + column] = slides[i] === 1 ? ex * fx + ey * fy + ez * fz : ex * nx + ey * ny + ez * nz
    const r = 9 * i
    const gx = rotation[r] * fx + rotation[r + 1] * fy + rotation[r + 2] * fz
    const gy = rotation[r + 3] * fx + rotation[r + 4] * fy + rotation[r + 5] * fz
    const gz = rotation[r + 6] * fx + rotation[r + 7] * fy + rotation[r + 8] * fz
    const px = offset[b],
      py = offset[b + 1],
      pz = offset[b + 2]
    const mx = rotation[r] * nx + rotation[r + 1] * ny + rotation[r + 2] * nz + py * gz - pz * gy
    const my = rotation[r + 3] * nx + rotation[r + 4] * ny + rotation[r + 5] * nz + pz * gx - px * gz
    const mz = rotation[r + 6] * nx + rotation[r + 7] * ny + rotation[r + 8] * nz + px * gy - py * gx
    nx = mx
    ny = my
    nz = mz
    fx = gx
    fy = gy
    fz = gz
  }
}

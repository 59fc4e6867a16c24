import { checkLength } from '../shape-error.ts'
import type { Chain } from './chain.ts'
import { sineCosine } from './trigonometry.ts'

/** Torque split by cause, each of length n, N·m (sliding joints: N). Their sum is the torque that the motion needs. */
export interface TorqueTerms {
  readonly inertia: Float64Array
  /** Coriolis and centrifugal. */
  readonly coriolis: Float64Array
  readonly gravity: Float64Array
}

/**
 * Joint torques that produce a motion, without friction, by the recursive Newton–Euler algorithm.
 *
 * @param chain   n joints, in joint order, with the payload that is attached to it
 * @param q       position, length n, rad (sliding joints: m); qd, qdd: velocity and acceleration likewise
 * @param tau     out, length n, N·m (sliding joints: N); overwritten, must not alias an input
 * @param wrench  optional: what the flange exerts on its surroundings, in the flange frame: moment (N·m, 3), force (N, 3)
 * @throws {ShapeError} a length is not n: names the argument, the length found and n
 * Source: Luh, Walker, Paul (1980); Featherstone, Rigid Body Dynamics Algorithms (2008), chapter 5, written for the
 * parameters about the links' origins, in which torque is linear.
 */
export function inverseDynamics(
  chain: Chain,
  q: Float64Array,
  qd: Float64Array,
  qdd: Float64Array,
  tau: Float64Array,
  wrench?: Float64Array,
): void {
  requireState(chain, q, qd, qdd)
  checkLength('tau', tau.length, chain.size, 'one per joint')
  if (wrench !== undefined) checkLength('wrench', wrench.length, 6, 'moment and force')
  placeLinks(chain, q)
  const { gravity } = chain
  torquesOfMotion(chain, qd, qdd, gravity, tau, wrench)
}

/**
 * As {@link inverseDynamics}, split into inertia, Coriolis and gravity.
 *
 * @param out  each term overwritten
 * @throws {ShapeError} a length is not n
 */
export function inverseDynamicsTerms(chain: Chain, q: Float64Array, qd: Float64Array, qdd: Float64Array, out: TorqueTerms): void {
  requireState(chain, q, qd, qdd)
  checkLength('inertia', out.inertia.length, chain.size, 'one per joint')
  checkLength('coriolis', out.coriolis.length, chain.size, 'one per joint')
  checkLength('gravity', out.gravity.length, chain.size, 'one per joint')
  const { gravity, work } = chain
  placeLinks(chain, q)
  torquesOfMotion(chain, work.zeros, qdd, work.weightless, out.inertia)
  torquesOfMotion(chain, qd, work.zeros, work.weightless, out.coriolis)
  torquesOfMotion(chain, work.zeros, work.zeros, gravity, out.gravity)
}

/**
 * Torques that hold the arm still.
 *
 * @param q    position, length n
 * @param tau  out, length n
 * @throws {ShapeError} a length is not n
 */
export function gravityTorque(chain: Chain, q: Float64Array, tau: Float64Array): void {
  checkLength('q', q.length, chain.size, 'one per joint')
  checkLength('tau', tau.length, chain.size, 'one per joint')
  const { gravity, work } = chain
  placeLinks(chain, q)
  torquesOfMotion(chain, work.zeros, work.zeros, gravity, tau)
}

/** @throws {ShapeError} q, qd or qdd is not n long */
export function requireState(chain: Chain, q: Float64Array, qd: Float64Array, qdd: Float64Array): void {
  checkLength('q', q.length, chain.size, 'one per joint')
  checkLength('qd', qd.length, chain.size, 'one per joint')
  checkLength('qdd', qdd.length, chain.size, 'one per joint')
}

/** Writes every link's rotation and offset in the link before, for position q. Trusts the length. */
export function placeLinks(chain: Chain, q: Float64Array): void {
  const { size, slides, origin, turn, slide } = chain
  const { rotation, offset, trig } = chain.work
  for (let i = 0; i < size; i++) {
    const at = 27 * i
    const isSliding = slides[i] === 1
    if (isSliding) {
      trig[0] = 0
      trig[1] = 1
    } else sineCosine(q, i, trig)
    const travel = isSliding ? q[i] : 0
    const sine = trig[0]
    const cosine = trig[1]
    for (let k = 0; k < 9; k++) rotation[9 * i + k] = turn[at + k] + cosine * turn[at + 9 + k] + sine * turn[at + 18 + k]
    for (let k = 0; k < 3; k++) offset[3 * i + k] = origin[3 * i + k] + travel * slide[3 * i + k]
  }
}

/**
 * Velocities and accelerations of the links, outwards. Needs {@link placeLinks} first.
 *
 * Row 0 of the work arrays is the base: at rest, accelerating against gravity, which stands for gravity acting on every link.
 */
export function moveLinks(chain: Chain, qd: Float64Array, qdd: Float64Array, gravity: Float64Array): void {
  const { size, slides, axis } = chain
  const { rotation, offset, angularVelocity: w, angularAcceleration: dw, acceleration: a } = chain.work
  w[0] = w[1] = w[2] = 0
  dw[0] = dw[1] = dw[2] = 0
  a[0] = -gravity[0]
  a[1] = -gravity[1]
  a[2] = -gravity[2]
  for (let i = 0; i < size; i++) {
    const b = 3 * i
    const o = b + 3
    const r = 9 * i
    const r0 = rotation[r],
      r1 = rotation[r + 1],
      r2 = rotation[r + 2]
    const r3 = rotation[r + 3],
      r4 = rotation[r + 4],
      r5 = rotation[r + 5]
    const r6 = rotation[r + 6],
      r7 = rotation[r + 7],
      r8 = rotation[r + 8]
    const wx = w[b],
      wy = w[b + 1],
      wz = w[b + 2]
    const dx = dw[b],
      dy = dw[b + 1],
      dz = dw[b + 2]
    const px = offset[b],
      py = offset[b + 1],
      pz = offset[b + 2]
    // ω × p, then acceleration of the link's origin: a + ω̇ × p + ω × (ω × p)
    const ux = wy * pz - wz * py,
      uy = wz * px - wx * pz,
      uz = wx * py - wy * px
    const sx = a[b] + dy * pz - dz * py + wy * uz - wz * uy
    const sy = a[b + 1] + dz * px - dx * pz + wz * ux - wx * uz
    const sz = a[b + 2] + dx * py - dy * px + wx * uy - wy * ux
    const nwx = r0 * wx + r3 * wy + r6 * wz,
      nwy = r1 * wx + r4 * wy + r7 * wz,
      nwz = r2 * wx + r5 * wy + r8 * wz
    const ndx = r0 * dx + r3 * dy + r6 * dz,
      ndy = r1 * dx + r4 * dy + r7 * dz,
      ndz = r2 * dx + r5 * dy + r8 * dz
    const nax = r0 * sx + r3 * sy + r6 * sz,
      nay = r1 * sx + r4 * sy + r7 * sz,
      naz = r2 * sx + r5 * sy + r8 * sz
    const v = qd[i]
    const c = qdd[i]
    const ex = axis[b],
      ey = axis[b + 1],
      ez = axis[b + 2]
    // ω × e q̇: what the moving frame adds to the joint's own acceleration
    const mx = (nwy * ez - nwz * ey) * v,
      my = (nwz * ex - nwx * ez) * v,
      mz = (nwx * ey - nwy * ex) * v
    if (slides[i] === 1) {
      w[o] = nwx
      w[o + 1] = nwy
      w[o + 2] = nwz
      dw[o] = ndx
      dw[o + 1] = ndy
      dw[o + 2] = ndz
      a[o] = nax + 2 * mx + ex * c
      a[o + 1] = nay + 2 * my + ey * c
      a[o + 2] = naz + 2 * mz + ez * c
    } else {
      w[o] = nwx + ex * v
      w[o + 1] = nwy + ey * v
      w[o + 2] = nwz + ez * v
      dw[o] = ndx + mx + ex * c
      dw[o + 1] = ndy + my + ey * c
      dw[o + 2] = ndz + mz + ez * c
      a[o] = nax
      a[o + 1] = nay
      a[o + 2] = naz
    }
  }
}

/** Torques of a motion of links already placed; trusts lengths. See {@link inverseDynamics}. */
export function torquesOfMotion(
  chain: Chain,
  qd: Float64Array,
  qdd: Float64Array,
  gravity: Float64Array,
  tau: Float64Array,
  wrench?: Float64Array,
): void {
  const { size, parameters } = chain
  const { angularVelocity: w, angularAcceleration: dw, acceleration: a, force, moment } = chain.work
  moveLinks(chain, qd, qdd, gravity)
  for (let i = 0; i < size; i++) {
    const o = 3 * i + 3
    const p = 10 * i
    const m = parameters[p],
      hx = parameters[p + 1],
      hy = parameters[p + 2],
      hz = parameters[p + 3]
    const xx = parameters[p + 4],
      xy = parameters[p + 5],
      xz = parameters[p + 6]
    const yy = parameters[p + 7],
      yz = parameters[p + 8],
      zz = parameters[p + 9]
    const wx = w[o],
      wy = w[o + 1],
      wz = w[o + 2]
    const dx = dw[o],
      dy = dw[o + 1],
      dz = dw[o + 2]
    const ax = a[o],
      ay = a[o + 1],
      az = a[o + 2]
    const ux = wy * hz - wz * hy,
      uy = wz * hx - wx * hz,
      uz = wx * hy - wy * hx
    force[o] = m * ax + dy * hz - dz * hy + wy * uz - wz * uy
    force[o + 1] = m * ay + dz * hx - dx * hz + wz * ux - wx * uz
    force[o + 2] = m * az + dx * hy - dy * hx + wx * uy - wy * ux
    const lx = xx * wx + xy * wy + xz * wz,
      ly = xy * wx + yy * wy + yz * wz,
      lz = xz * wx + yz * wy + zz * wz
    moment[o] = xx * dx + xy * dy + xz * dz + wy * lz - wz * ly + hy * az - hz * ay
    moment[o + 1] = xy * dx + yy * dy + yz * dz + wz * lx - wx * lz + hz * ax - hx * az
    moment[o + 2] = xz * dx + yz * dy + zz * dz + wx * ly - wy * lx + hx * ay - hy * ax
  }
  if (wrench !== undefined) addFlangeWrench(chain, wrench)
  gatherTorques(chain, tau)
}

// Inwards: each link carries its own wrench and that of the links after it; the joint feels the part along its axis.
function gatherTorques(chain: Chain, tau: Float64Array): void {
  const { size, slides, axis } = chain
  const { rotation, offset, force, moment } = chain.work
  for (let i = size - 1; i >= 0; i--) {
    const b = 3 * i
    const o = b + 3
    const fx = force[o],
      fy = force[o + 1],
      fz = force[o + 2]
    const nx = moment[o],
      ny = moment[o + 1],
      nz = moment[o + 2]
    const ex = axis[b],
      ey = axis[b + 1],
      ez = axis[b + 2]
    tau[i] = slides[i] === 1 ? ex * fx + ey * fy + ez * fz : ex * nx + ey * ny + ez * nz
    if (i === 0) break
    const r = 9 * i
    const gx = rotation[r] * fx + rotation[r + 1] * fy + rotation[r + 2] * fz
    const gy = rotation[r + 3] * fx + rotation[r + 4] * fy + rotation[r + 5] * fz
    const gz = rotation[r + 6] * fx + rotation[r + 7] * fy + rotation[r + 8] * fz
    const px = offset[b],
      py = offset[b + 1],
      pz = offset[b + 2]
    force[b] = force[b] + gx
    force[b + 1] = force[b + 1] + gy
    force[b + 2] = force[b + 2] + gz
    moment[b] = moment[b] + rotation[r] * nx + rotation[r + 1] * ny + rotation[r + 2] * nz + py * gz - pz * gy
    moment[b + 1] = moment[b + 1] + rotation[r + 3] * nx + rotation[r + 4] * ny + rotation[r + 5] * nz + pz * gx - px * gz
    moment[b + 2] = moment[b + 2] + rotation[r + 6] * nx + rotation[r + 7] * ny + rotation[r + 8] * nz + px * gy - py * gx
  }
}

function addFlangeWrench(chain: Chain, wrench: Float64Array): void {
  const { size, flangeRotation: r, flangeOrigin: p } = chain
  const { force, moment } = chain.work
  const o = 3 * size
  const nx = wrench[0],
    ny = wrench[1],
    nz = wrench[2]
  const fx = wrench[3],
    fy = wrench[4],
    fz = wrench[5]
  const gx = r[0] * fx + r[1] * fy + r[2] * fz
  const gy = r[3] * fx + r[4] * fy + r[5] * fz
  const gz = r[6] * fx + r[7] * fy + r[8] * fz
  force[o] = force[o] + gx
  force[o + 1] = force[o + 1] + gy
  force[o + 2] = force[o + 2] + gz
  moment[o] = moment[o] + r[0] * nx + r[1] * ny + r[2] * nz + p[1] * gz - p[2] * gy
  moment[o + 1] = moment[o + 1] + r[3] * nx + r[4] * ny + r[5] * nz + p[2] * gx - p[0] * gz
  moment[o + 2] = moment[o + 2] + r[6] * nx + r[7] * ny + r[8] * nz + p[0] * gy - p[1] * gx
}

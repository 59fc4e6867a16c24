import type { Matrix3, Placement, Vector3 } from './chain.ts'

/**
 * Rotation by fixed-axis roll, pitch, yaw: about x, then y, then z of the outer frame, as robot descriptions give it.
 *
 * @param roll   rad; pitch and yaw likewise
 */
export function rotationFromRollPitchYaw(roll: number, pitch: number, yaw: number): Matrix3 {
  const sr = Math.sin(roll),
    cr = Math.cos(roll)
  const sp = Math.sin(pitch),
    cp = Math.cos(pitch)
  const sy = Math.sin(yaw),
    cy = Math.cos(yaw)
  return [
    cy * cp,
    cy * sp * sr - sy * cr,
    cy * sp * cr + sy * sr,
    sy * cp,
    sy * sp * sr + cy * cr,
    sy * sp * cr - cy * sr,
    -sp,
    cp * sr,
    cp * cr,
  ]
}

/** a · b. */
export function multiplyRotations(a: Matrix3, b: Matrix3): Matrix3 {
  const entry = (r: number, c: number): number => a[3 * r] * b[c] + a[3 * r + 1] * b[3 + c] + a[3 * r + 2] * b[6 + c]
  return [entry(0, 0), entry(0, 1), entry(0, 2), entry(1, 0), entry(1, 1), entry(1, 2), entry(2, 0), entry(2, 1), entry(2, 2)]
}

/** The transpose: the inverse of a rotation. */
export function transpose([a, b, c, d, e, f, g, h, i]: Matrix3): Matrix3 {
  return [a, d, g, b, e, h, c, f, i]
}

/** A vector of the inner frame in coordinates of the outer one. */
export function rotate(rotation: Matrix3, [x, y, z]: Vector3): Vector3 {
  const row = (r: number): number => rotation[3 * r] * x + rotation[3 * r + 1] * y + rotation[3 * r + 2] * z
  return [row(0), row(1), row(2)]
}

/** Where a frame sits in the outermost one, given where it sits in one that sits in the outermost one. */
export function compose(outer: Placement, inner: Placement): Placement {
  const [x, y, z] = rotate(outer.rotation, inner.position)
  const [px, py, pz] = outer.position
  return { position: [px + x, py + y, pz + z], rotation: multiplyRotations(outer.rotation, inner.rotation) }
}

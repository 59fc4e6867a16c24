// Sine and cosine from + − × ÷ only, so that torques of a rigid-body base are the same to the bit in every engine:
// ECMAScript leaves Math.sin and Math.cos to the implementation.

// π/2 in three parts whose leading parts have trailing zeros, so that k times a part is exact for |k| < 2^20
// (Cody & Waite, Software Manual for the Elementary Functions, 1980; the split is fdlibm's, e_rem_pio2.c).
const TWO_OVER_PI = 6.36619772367581382433e-1
const HALF_PI_1 = 1.57079632673412561417
const HALF_PI_2 = 6.0771005063039659766e-11
const HALF_PI_3 = 2.02226624879595063154e-21

/** Largest |angle| that {@link sineCosine} reduces accurately: beyond it the quotient no longer fits the split of π/2. */
export const LARGEST_ANGLE = 1e6

/**
 * Sine and cosine of one angle, within one unit in the last place. Angle and result stay in arrays: a number handed over
 * by itself is boxed where the call is not inlined, and an evaluation of dynamics must not allocate.
 *
 * @param angles  rad, |angle| ≤ {@link LARGEST_ANGLE}; beyond, and for a value that is not finite, the result is NaN
 * @param index   which of them
 * @param out     out: sine at 0, cosine at 1
 * Source: polynomials of fdlibm (Sun Microsystems, 1993), k_sin.c and k_cos.c.
 */
export function sineCosine(angles: Float64Array, index: number, out: Float64Array): void {
  const angle = angles[index]
  if (!(angle <= LARGEST_ANGLE && angle >= -LARGEST_ANGLE)) {
    out[0] = NaN
    out[1] = NaN
    return
  }
  const quarter = Math.floor(angle * TWO_OVER_PI + 0.5)
  const head = angle - quarter * HALF_PI_1
  let correction = quarter * HALF_PI_2
  const middle = head - correction
  correction = quarter * HALF_PI_3 - (head - middle - correction)
  const x = middle - correction
  const tail = middle - x - correction
  const z = x * x
  const cube = z * x
  const sinePolynomial =
    8.33333333332248946124e-3 +
    z *
      (-1.98412698298579493134e-4 +
        z * (2.75573137070700676789e-6 + z * (-2.50507602534068634195e-8 + z * 1.58969099521155010221e-10)))
  const sine = x - (z * (0.5 * tail - cube * sinePolynomial) - tail - cube * -1.66666666666666324348e-1)
  const cosinePolynomial =
    z *
    (4.16666666666666019037e-2 +
      z *
        (-1.38888888888741095749e-3 +
          z *
            (2.48015872894767294178e-5 +
              z * (-2.75573143513906633035e-7 + z * (2.0875723212981748279e-9 + z * -1.13596475577881948265e-11)))))
  const half = 0.5 * z
  const near = 1 - half
  const cosine = near + (1 - near - half + (z * cosinePolynomial - x * tail))
  const turn = quarter - 4 * Math.floor(quarter / 4)
  if (turn === 0) {
    out[0] = sine
    out[1] = cosine
  } else if (turn === 1) {
    out[0] = cosine
    out[1] = -sine
  } else if (turn === 2) {
    out[0] = -sine
    out[1] = -cosine
  } else {
    out[0] = -cosine
    out[1] = sine
  }
}

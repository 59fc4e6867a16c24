import { exp } from './elementary.ts'

// ln 2 in two parts: the first has 32 trailing zero bits, so that an exponent times it is exact.
const LN2_HIGH = 6.9314718036912381649e-1
const LN2_LOW = 1.90821492927058770002e-10

/** 2^512, 2^256, …, 2^1: every power of two of a double is a product of these, exactly. */
const POWERS_OF_TWO = [2 ** 512, 2 ** 256, 2 ** 128, 2 ** 64, 2 ** 32, 2 ** 16, 2 ** 8, 2 ** 4, 2 ** 2, 2 ** 1]

/**
 * Natural logarithm from + − × ÷ alone, within 2 units in the last place. Math.log differs between engines in the last
 * bits; what an adaptation serves must not.
 *
 * @param x  0 gives −Infinity, below 0 and NaN give NaN
 */
export function ln(x: number): number {
  if (!(x > 0)) return x === 0 ? -Infinity : NaN
  if (x === Infinity) return x
  let mantissa = x
  let exponent = 0
  for (let k = 0, step = 512; k < POWERS_OF_TWO.length; k++, step /= 2) {
    const power = POWERS_OF_TWO[k]
    while (mantissa >= power) {
      mantissa /= power
      exponent += step
    }
    while (mantissa * power < 2) {
      mantissa *= power
      exponent -= step
    }
  }
  if (mantissa > Math.SQRT2) {
    mantissa /= 2
    exponent++
  }
  // ln m = 2 artanh s with |s| ≤ 0.172: the first term left out is below 1e-18 of the sum.
  const s = (mantissa - 1) / (mantissa + 1)
  const square = s * s
  let series = 0
  for (let power = 23; power >= 3; power -= 2) series = (series + 1 / power) * square
  return exponent * LN2_HIGH + (2 * s + (2 * s * series + exponent * LN2_LOW))
}

/**
 * What a fading quantity is multiplied by over a time: share to the power seconds.
 *
 * @param share  left after one second, 0 to 1
 * @param seconds  from 0
 */
export function fade(share: number, seconds: number): number {
  if (share === 1 || seconds === 0) return 1
  return share === 0 ? 0 : exp(seconds * ln(share))
}

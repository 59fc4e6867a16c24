/**
 * exp, tanh, softplus and their relatives from + − × ÷ alone. Math.exp and Math.tanh may differ in the last bit between
 * engines and versions, and a served state has to come out the same to the bit everywhere.
 */

const log2e = 1.4426950408889634
// ln 2 in two parts: the first has its lower bits zero, so k · ln2High is exact for every k used here.
const ln2High = 6.93147180369123816490e-1
const ln2Low = 1.90821492927058770002e-10

// 1/k! from k = 13 down to 2: with |r| ≤ ln 2 / 2 the first term left out is below 4e-18.
const inverseFactorials = [
  1 / 6227020800, 1 / 479001600, 1 / 39916800, 1 / 3628800, 1 / 362880, 1 / 40320, 1 / 5040, 1 / 720, 1 / 120, 1 / 24, 1 / 6,
  1 / 2,
]

// 1/(2k + 1) from k = 17 down to 1, for artanh s with s ≤ 1/3.
const oddReciprocals = Array.from({ length: 17 }, (_, index) => 1 / (2 * (17 - index) + 1))

/**
 * eˣ, to about one unit in the last place; 0 below −708, Infinity above 709.
 *
 * @param x  any number; NaN stays NaN
 * Source of the argument reduction: Cody and Waite, Software Manual for the Elementary Functions (1980) (from memory).
 */
export function exp(x: number): number {
  if (x > 709) return Infinity
  if (x < -708) return 0
  const k = Math.floor(x * log2e + 0.5)
  const r = x - k * ln2High - k * ln2Low
  let sum = inverseFactorials[0]
  for (let i = 1; i < inverseFactorials.length; i++) sum = sum * r + inverseFactorials[i]
  return (sum * r * r + r + 1) * powerOfTwo(k)
}

/** tanh x. Near zero from its odd series, so that small values keep their relative precision. */
export function tanh(x: number): number {
  const size = x < 0 ? -x : x
  if (size > 20) return x < 0 ? -1 : 1
  if (size < 0.125) {
    // x − x³/3 + 2x⁵/15 − …: coefficients are those of the Maclaurin series.
    const s = x * x
    return (
      x +
      x *
        s *
        (-1 / 3 +
          s *
            (2 / 15 +
              s * (-17 / 315 + s * (62 / 2835 + s * (-1382 / 155925 + s * (21844 / 6081075 + s * (-929569 / 638512875)))))))
    )
  }
  const value = 1 - 2 / (exp(2 * size) + 1)
  return x < 0 ? -value : value
}

/** The logistic function 1 / (1 + e⁻ˣ), without overflow. */
export function logistic(x: number): number {
  if (x >= 0) return 1 / (1 + exp(-x))
  const e = exp(x)
  return e / (1 + e)
}

/** ln(1 + eˣ), without overflow; its derivative is `logistic`. */
export function softplus(x: number): number {
  return (x > 0 ? x : 0) + logOnePlus(exp(x > 0 ? -x : x))
}

/** ln(1 + u) for u in [0, 1], by 2 artanh(u / (2 + u)). */
function logOnePlus(u: number): number {
  const s = u / (2 + u)
  const square = s * s
  let sum = 0
  for (let i = 0; i < oddReciprocals.length; i++) sum = (sum + oddReciprocals[i]) * square
  return 2 * s * (1 + sum)
}

/** 2ᵏ for k in −1022..1023, exactly, by repeated squaring. */
function powerOfTwo(k: number): number {
  let factor = k < 0 ? 0.5 : 2
  let left = k < 0 ? -k : k
  let value = 1
  while (left > 0) {
    if (left % 2 === 1) value *= factor
    left = (left - (left % 2)) / 2
    if (left > 0) factor *= factor
  }
  return value
}

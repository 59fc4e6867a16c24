// exp, tanh and softplus of four f32 at once, from + − × ÷ and bit moves alone: WebAssembly has none of its own, and results
// must be the same to the bit in every engine. The polynomials are plain Taylor series, long enough for their interval.

const log2e: f32 = 1.44269504
// ln 2 in two parts: the first has nine bits, so n · ln2High is exact for every n met here.
const ln2High: f32 = 0.693359375
const ln2Low: f32 = -2.12194440e-4

// @ts-ignore: decorator
@inline
function step(sum: v128, r: v128, coefficient: f32): v128 {
  return f32x4.add(f32x4.mul(sum, r), f32x4.splat(coefficient))
}

/** eʳ − 1 for |r| ≤ ln 2 / 2; the first term left out is below 6e-9 of it. */
// @ts-ignore: decorator
@inline
function reducedExpm1(r: v128): v128 {
  let sum = f32x4.splat(1.0 / 5040.0)
  sum = step(sum, r, 1.0 / 720.0)
  sum = step(sum, r, 1.0 / 120.0)
  sum = step(sum, r, 1.0 / 24.0)
  sum = step(sum, r, 1.0 / 6.0)
  sum = step(sum, r, 0.5)
  return f32x4.add(r, f32x4.mul(f32x4.mul(r, r), sum))
}

/** 2ⁿ for integer lanes −126 ≤ n ≤ 127, as float lanes. */
// @ts-ignore: decorator
@inline
function powerOfTwo(n: v128): v128 {
  return i32x4.shl(i32x4.add(n, i32x4.splat(127)), 23)
}

/** eˣ: Infinity above 88.73, subnormal and then 0 below −87.3; NaN stays NaN. */
export function exp4(x: v128): v128 {
  // Past these ends the result is Infinity or 0 anyway; inside them n stays within what two halves can scale.
  const bounded = f32x4.max(f32x4.min(x, f32x4.splat(100)), f32x4.splat(-110))
  const n = f32x4.nearest(f32x4.mul(bounded, f32x4.splat(log2e)))
  let r = f32x4.sub(bounded, f32x4.mul(n, f32x4.splat(ln2High)))
  r = f32x4.sub(r, f32x4.mul(n, f32x4.splat(ln2Low)))
  const value = f32x4.add(f32x4.splat(1), reducedExpm1(r))
  const whole = i32x4.trunc_sat_f32x4_s(n)
  const half = i32x4.shr_s(whole, 1)
  return f32x4.mul(f32x4.mul(value, powerOfTwo(half)), powerOfTwo(i32x4.sub(whole, half)))
}

/** tanh x = e / (e + 2) with e = exp(2|x|) − 1, sign put back; keeps full relative precision near 0. NaN stays NaN. */
export function tanh4(x: v128): v128 {
  // From 9.02 on tanh rounds to 1.
  const t = f32x4.min(f32x4.mul(f32x4.abs(x), f32x4.splat(2)), f32x4.splat(20))
  const n = f32x4.nearest(f32x4.mul(t, f32x4.splat(log2e)))
  let r = f32x4.sub(t, f32x4.mul(n, f32x4.splat(ln2High)))
  r = f32x4.sub(r, f32x4.mul(n, f32x4.splat(ln2Low)))
  const scale = powerOfTwo(i32x4.trunc_sat_f32x4_s(n))
  const e = f32x4.add(f32x4.mul(scale, reducedExpm1(r)), f32x4.sub(scale, f32x4.splat(1)))
  const value = f32x4.div(e, f32x4.add(e, f32x4.splat(2)))
  return v128.or(value, v128.and(x, i32x4.splat(0x80000000)))
}

/** softplus z = max(z, 0) + ln(1 + exp(−|z|)), with ln(1 + u) = 2 artanh(u / (2 + u)) as a series. */
export function softplus4(z: v128): v128 {
  const u = exp4(f32x4.neg(f32x4.abs(z)))
  const s = f32x4.div(u, f32x4.add(u, f32x4.splat(2)))
  const q = f32x4.mul(s, s)
  let sum = f32x4.splat(1.0 / 15.0)
  sum = step(sum, q, 1.0 / 13.0)
  sum = step(sum, q, 1.0 / 11.0)
  sum = step(sum, q, 1.0 / 9.0)
  sum = step(sum, q, 1.0 / 7.0)
  sum = step(sum, q, 1.0 / 5.0)
  sum = step(sum, q, 1.0 / 3.0)
  sum = step(sum, q, 1.0)
  return f32x4.add(f32x4.max(z, f32x4.splat(0)), f32x4.mul(f32x4.add(s, s), sum))
}

/** The slope of softplus, 1 / (1 + exp(−z)). */
export function sigmoid4(z: v128): v128 {
  const u = exp4(f32x4.neg(f32x4.abs(z)))
  const small = f32x4.div(u, f32x4.add(u, f32x4.splat(1)))
  const large = f32x4.div(f32x4.splat(1), f32x4.add(u, f32x4.splat(1)))
  return v128.bitselect(small, large, f32x4.lt(z, f32x4.splat(0)))
}

// Updates of a range of parameters, in place. Padding has gradient 0 and stays 0 under each of them.

/** θ ← θ − rate · g. */
export function sgd(parameters: usize, gradient: usize, bytes: usize, rate: f32): void {
  const scale = f32x4.splat(rate)
  for (let at: usize = 0; at < bytes; at += 16) {
    const moved = f32x4.mul(scale, v128.load(gradient + at))
    v128.store(parameters + at, f32x4.sub(v128.load(parameters + at), moved))
  }
}

const beta1: f64 = 0.9
const beta2: f64 = 0.999
// Below it a moment is set to 0. Decaying averages, and their product with a small step size, end up as subnormal numbers, on
// which arithmetic is a hundred times slower.
const smallestMoment: f32 = 1e-30

/** Bytes before the first moments: β1ᵗ and β2ᵗ as f64. */
export const momentsHead: usize = 64

/** Puts the two powers of Adam forward, before the first call of `adam` of a step. */
export function countAdamStep(moments: usize): void {
  store<f64>(moments, load<f64>(moments) * beta1)
  store<f64>(moments, load<f64>(moments, 8) * beta2, 8)
}

// @ts-ignore: decorator
@inline
function decay(moment: v128, kept: f32, taken: f32, fresh: v128): v128 {
  const value = f32x4.add(f32x4.mul(f32x4.splat(kept), moment), f32x4.mul(f32x4.splat(taken), fresh))
  // NaN compares false and stays, so that the guards see it.
  return v128.andnot(value, f32x4.lt(f32x4.abs(value), f32x4.splat(smallestMoment)))
}

/**
 * Adam with bias correction and ε = 1e-8. Source: Kingma and Ba 2015, algorithm 1.
 *
 * @param m  first moments of the range, v: second moments
 * @param moments  where β1ᵗ and β2ᵗ are
 */
export function adam(parameters: usize, gradient: usize, m: usize, v: usize, bytes: usize, rate: f64, moments: usize): void {
  const stepSize = f32x4.splat(<f32>(rate / (1.0 - load<f64>(moments))))
  const correction = f32x4.splat(<f32>(1.0 / (1.0 - load<f64>(moments, 8))))
  const epsilon = f32x4.splat(1e-8)
  for (let at: usize = 0; at < bytes; at += 16) {
    const g = v128.load(gradient + at)
    const first = decay(v128.load(m + at), 0.9, 0.1, g)
    const second = decay(v128.load(v + at), 0.999, 0.001, f32x4.mul(g, g))
    v128.store(m + at, first)
    v128.store(v + at, second)
    const spread = f32x4.add(f32x4.sqrt(f32x4.mul(second, correction)), epsilon)
    const moved = f32x4.div(f32x4.mul(stepSize, first), spread)
    v128.store(parameters + at, f32x4.sub(v128.load(parameters + at), moved))
  }
}

/** Σ (a − b)² in f64; b = 0: Σ a². */
export function squaredDistance(a: usize, b: usize, bytes: usize): f64 {
  let sums = f64x2.splat(0)
  for (let at: usize = 0; at < bytes; at += 16) {
    let difference = v128.load(a + at)
    if (b) difference = f32x4.sub(difference, v128.load(b + at))
    const low = f64x2.promote_low_f32x4(difference)
    const high = f64x2.promote_low_f32x4(v128.shuffle<f32>(difference, difference, 2, 3, 0, 1))
    sums = f64x2.add(sums, f64x2.add(f64x2.mul(low, low), f64x2.mul(high, high)))
  }
  return f64x2.extract_lane(sums, 0) + f64x2.extract_lane(sums, 1)
}

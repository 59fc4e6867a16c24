import { exp, logistic, softplus } from '../elementary.ts'

/** The map that makes a weight positive: eᵃ, or softplus ln(1 + eᵃ). */
export type Positive = 'exp' | 'softplus'

/** The weight. */
export function positiveValue(positive: Positive, a: number): number {
  return positive === 'exp' ? exp(a) : softplus(a)
}

/** Its derivative. */
export function positiveSlope(positive: Positive, a: number): number {
  return positive === 'exp' ? exp(a) : logistic(a)
}

/** The argument that gives weight 1. */
export function positiveInverseOfOne(positive: Positive): number {
  return positive === 'exp' ? 0 : Math.log(Math.E - 1)
}

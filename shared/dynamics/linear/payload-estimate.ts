import { PAYLOAD_SCALES } from './basis.ts'
import type { LinearState } from './update.ts'

/** What a payload state says is at the flange, with standard deviations from its covariance. */
export interface PayloadEstimate {
  /** kg. */
  readonly mass: number
  readonly massStd: number
  /** m, in the flange frame; null where the mass is too small to say: below twice its standard deviation, or not positive. */
  readonly centerOfMass: readonly [number, number, number] | null
  readonly centerOfMassStd: readonly [number, number, number] | null
  /** What the base's friction is multiplied by; null without that state. */
  readonly frictionScale: number | null
  readonly frictionScaleStd: number | null
}

/**
 * Mass and centre of mass of a payload state. The centre is first moment over mass; its variance follows to first order:
 * var c = (var s − 2 c cov(s, m) + c² var m) / m².
 *
 * @param state  of a payload basis: z in units of PAYLOAD_SCALES; without covariance (first-order updates) deviations are NaN
 * @param size  4, or 5 with a friction scale
 */
export function estimatePayload({ values, covariance }: LinearState, size: number): PayloadEstimate {
  const d = values.length
  const cov = (r: number, c: number) => (covariance.length > 0
    ? covariance[r * d + c] * PAYLOAD_SCALES[r] * PAYLOAD_SCALES[c]
    : NaN)
  const mass = values[0] * PAYLOAD_SCALES[0]
  const massStd = Math.sqrt(cov(0, 0))
  const isKnown = mass > 0 && (Number.isNaN(massStd) ? mass > leastMass : mass > 2 * massStd)
  const axes = [1, 2, 3]
  const center = axes.map(k => (values[k] * PAYLOAD_SCALES[k]) / mass)
  const centerStd = axes.map((k, i) =>
    Math.sqrt(Math.max(cov(k, k) - 2 * center[i] * cov(k, 0) + center[i] * center[i] * cov(0, 0), 0)) / mass)
  return {
    mass,
    massStd,
    centerOfMass: isKnown ? (center as [number, number, number]) : null,
    centerOfMassStd: isKnown ? (centerStd as [number, number, number]) : null,
    frictionScale: size > 4 ? 1 + values[4] * PAYLOAD_SCALES[4] : null,
    frictionScaleStd: size > 4 ? Math.sqrt(cov(4, 4)) : null,
  }
}

/** Below this a payload without known uncertainty is taken for none, kg. */
const leastMass = 0.05

/** What a payload of this arm can be; the envelope may narrow it. */
export interface PayloadBounds {
  /** kg. */
  readonly mostMass: number
  /** Farthest centre of mass from the flange's origin, m. */
  readonly mostReach: number
  /** Friction scale, from and to. */
  readonly frictionScale: readonly [number, number]
}

export const defaultPayloadBounds: PayloadBounds = { mostMass: 10, mostReach: 0.5, frictionScale: [0.3, 3] }

/** How far outside, in standard deviations, an estimate has to be: while little is known yet, nothing is implausible. */
const certainty = 3

/**
 * Why an estimate cannot be, as sentences with numbers; empty when it can. Only what is certain counts: a bound is broken
 * when the estimate is more than three standard deviations beyond it.
 */
export function implausibilities(estimate: PayloadEstimate, bounds: PayloadBounds = defaultPayloadBounds): string[] {
  const { mass, massStd, centerOfMass, centerOfMassStd, frictionScale, frictionScaleStd } = estimate
  const slack = (std: number | null) => certainty * (std !== null && std > 0 ? std : 0)
  const found: string[] = []
  const least = -Math.max(0.1, slack(massStd))
  if (!(mass >= least)) found.push(`The payload's mass is estimated at ${mass.toFixed(2)} kg, which cannot be below 0.`)
  if (!(mass - slack(massStd) <= bounds.mostMass)) {
    found.push(`The payload's mass is estimated at ${mass.toFixed(2)} kg, above the ${bounds.mostMass} kg allowed.`)
  }
  if (centerOfMass && centerOfMassStd) {
    const reach = Math.sqrt(centerOfMass.reduce((sum, value) => sum + value * value, 0))
    const std = Math.sqrt(centerOfMassStd.reduce((sum, value) => sum + (Number.isNaN(value) ? 0 : value * value), 0))
    if (reach - certainty * std > bounds.mostReach) {
      found.push(
        `The payload's centre of mass is estimated ${reach.toFixed(2)} m from the flange, `
        + `beyond the ${bounds.mostReach} m allowed.`,
      )
    }
  }
  if (frictionScale !== null) {
    const [low, high] = bounds.frictionScale
    const room = slack(frictionScaleStd)
    if (!(frictionScale + room >= low && frictionScale - room <= high)) {
      found.push(`Friction is estimated at ${frictionScale.toFixed(2)} times the base's, outside ${low} to ${high}.`)
    }
  }
  return found
}

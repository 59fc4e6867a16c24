import type { ArmLimits } from './limits.ts'
import type { Version } from './version.ts'

/** States to predict for: matrices row-major, rows × n, SI units. */
export interface PredictQuery {
  readonly rows: number
  readonly position: Float64Array
  readonly velocity: Float64Array
  readonly acceleration: Float64Array
  /** Seconds per row, rising: bounds the change of torque from row to row. null: no bound on the change. */
  readonly time: Float64Array | null
}

/** Where predictions are written; made once by createPrediction, used again and again. */
export interface Prediction {
  /** rows × n, N·m, clamped. */
  torque: Float64Array
  /** One per row, 0 to 1. */
  coverage: Float64Array
  /** Pairs row, joint, one after the other, of the torques that were clamped; the first 2 × limitedCount numbers hold. */
  limited: Int32Array
  limitedCount: number
}

/** Room for a prediction of up to maxRows rows of n joints. */
export declare function createPrediction(maxRows: number, joints: number): Prediction

/** Predicts with one version: the same numbers in server, SDK and browser. */
export interface Predictor {
  readonly joints: number
  /** @throws {ShapeError} a length does not fit, or rows is not 1 to 4096 */
  predict(query: PredictQuery, into: Prediction): void
  /** Frees the kernel memory it holds. */
  release(): void
}

/** A predictor for a version on an arm. @throws {ShapeError} the arm has another number of joints */
export declare function createPredictor(version: Version, limits: ArmLimits): Predictor

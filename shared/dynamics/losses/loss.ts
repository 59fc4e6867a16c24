import type { Random } from '../random.ts'
import type { Positive } from './positive.ts'

export type LossName = 'mse' | 'structured' | 'state_dependent' | 'unstructured'

/** Sizes of a loss function. */
export interface LossShape {
  /** n. */
  readonly joints: number
  /** Length of a network input row: 3n. */
  readonly inputs: number
  /** Width of the small network of `state_dependent` and `unstructured`. */
  readonly hidden: number
  /** What makes weights positive in `structured` and `state_dependent`. */
  readonly positive: Positive
}

/** Rows a loss is evaluated on, all row-major and normalised; arrays may be longer than the rows used. */
export interface LossRows {
  readonly rows: number
  /** rows × inputs: the network's input. */
  readonly x: Float64Array
  /** rows × joints: what was measured, in base standard deviations. */
  readonly measured: Float64Array
  /** rows × joints: what was predicted, in base standard deviations. */
  readonly predicted: Float64Array
}

/**
 * A loss of one kind and shape, with its work arrays. φ (`parameters`) is always an argument, so one evaluator serves many
 * sets of parameters. Means are over rows, and over joints where the kind says so.
 */
export interface Loss {
  readonly parameterCount: number
  /** The loss. */
  value(parameters: Float64Array, given: LossRows): number
  /**
   * The loss and its derivative with respect to the prediction.
   *
   * @param predictionGradient  out, rows × joints, overwritten
   */
  gradient(parameters: Float64Array, given: LossRows, predictionGradient: Float64Array): number
  /**
   * Adds the derivative with respect to φ.
   *
   * @param sum  in and out, `parameterCount` values: sum += scale · ∂L/∂φ
   */
  addParameterGradient(parameters: Float64Array, given: LossRows, scale: number, sum: Float64Array): void
  /**
   * Second order along a direction ẏ of the prediction: what the prediction gradient becomes when the prediction moves
   * along ẏ, and what the directional derivative Σ ∂L/∂y · ẏ gives when φ moves (the mixed term).
   *
   * @param tangent  ẏ, rows × joints
   * @param gradientTangent  out, rows × joints, overwritten: ∂²L/∂y² · ẏ
   * @param sum  in and out, `parameterCount` values: sum += scale · ∂/∂φ (Σ ∂L/∂y · ẏ)
   */
  secondOrder(
    parameters: Float64Array,
    given: LossRows,
    tangent: Float64Array,
    gradientTangent: Float64Array,
    scale: number,
    sum: Float64Array,
  ): void
  /**
   * Mean weight of each joint's squared error over the rows, 1 for plain squared error. `unstructured` has no weights; it
   * answers how large its prediction gradient is beside that of plain squared error, summed over the rows.
   *
   * @param weights  out, length joints, overwritten
   */
  weights(parameters: Float64Array, given: LossRows, weights: Float64Array): void
}

/** One kind of loss: an entry of the table in index.ts. */
export interface LossKind {
  readonly name: LossName
  /** Number of values of φ. */
  parameterCount(shape: LossShape): number
  /** φ before meta-training: such that the kind starts close to plain squared error. */
  initialParameters(shape: LossShape, random: Random): Float64Array
  /** An evaluator for up to `maxRows` rows; made once, outside any loop. */
  create(shape: LossShape, maxRows: number): Loss
}

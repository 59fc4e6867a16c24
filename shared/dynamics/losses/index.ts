import type { LossKind, LossName } from './loss.ts'
import { mse } from './mse.ts'
import { stateDependent } from './state-dependent.ts'
import { structured } from './structured.ts'
import { unstructured } from './unstructured.ts'

export type { Loss, LossKind, LossName, LossRows, LossShape } from './loss.ts'
export type { Positive } from './positive.ts'

/**
 * All kinds of loss, by the name they have in the contract.
 *
 * To add a kind: write one file beside these with a `LossKind` (value, prediction gradient, parameter gradient and second
 * order side by side, parameters in one flat order stated in its docstring), add its name to `LossName` and one line here.
 * tests/unit/dynamics/losses.test.ts walks this table and checks every derivative against finite differences. A kind that
 * is to be served needs its f32 kernel too.
 */
export const lossKinds: Readonly<Record<LossName, LossKind>> = {
  mse,
  structured,
  state_dependent: stateDependent,
  unstructured,
}

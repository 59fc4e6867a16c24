import type { Kernels, LossHandle } from '../kernels/kernels.ts'
import { lossShapeOf } from '../loss-version.ts'
import type { AdaptationInputs } from './adaptation.ts'

/** The loss of an adaptation in kernel memory. */
export function loadLossOf(kernels: Kernels, { loss, version }: AdaptationInputs): LossHandle {
  const { joints } = version.description
  if (loss === 'mse') return kernels.loadLoss('mse', { joints, inputs: 3 * joints, hidden: 0, positive: 'exp' }, [])
  return kernels.loadLoss(loss.description.kind, lossShapeOf(loss.description), loss.parameters)
}

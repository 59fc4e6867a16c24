import type { BatchHandle, Kernels, LossHandle, MomentsHandle, NetworkHandle, NetworkScheme } from './kernels/kernels.ts'
import type { NormalisedMotion } from './motion.ts'
import { measureNextBatch, type AdaptationRule, type Base, type NextBatchMeasure } from './prequential.ts'

/**
 * The next-batch error by the SIMD kernels, in f32, for `all` and `last_layer`; `bias` is cheap and stays in double precision.
 * It keeps every motion it has seen in kernel memory until `free`.
 *
 * @param kernels  used for nothing else during a call
 */
export function createKernelNextBatch(kernels: Kernels): NextBatchMeasure & { free(): void } {
  const batches = new Map<NormalisedMotion, BatchHandle>()
  let networkFor: { base: Base; start: NetworkHandle; adapted: NetworkHandle } | undefined

  function batchOf(motion: NormalisedMotion, inputs: number, joints: number): BatchHandle {
    const known = batches.get(motion)
    if (known !== undefined) return known
    const batch = kernels.createBatch(inputs, joints)
    batch.loadNormalised(motion.x, motion.measured, motion.rows)
    batches.set(motion, batch)
    return batch
  }

  function networkOf(base: Base): NetworkHandle {
    if (networkFor?.base !== base) {
      freeNetworks()
      const start = kernels.loadNetwork(base.network, base.parameters)
      networkFor = { base, start, adapted: start.clone() }
    }
    networkFor.adapted.copyFrom(networkFor.start)
    return networkFor.adapted
  }

  function freeNetworks(): void {
    networkFor?.start.free()
    networkFor?.adapted.free()
    networkFor = undefined
  }

  function measure(base: Base, motion: NormalisedMotion, rule: AdaptationRule): number {
    if (rule.scheme === 'bias') return measureNextBatch(base, motion, rule).error
    const joints = base.network.sizes.at(-1)!
    const batch = batchOf(motion, base.network.sizes[0], joints)
    const loss = kernels.loadLoss(rule.loss, rule.lossShape, rule.lossParameters)
    const moments = rule.update === 'adam' ? kernels.createMoments(networkOf(base)) : undefined
    try {
      return run(networkOf(base), batch, loss, moments, motion.rows, rule.rowsPerStep, rule.rate, rule.scheme, joints)
    } finally {
      loss.free()
      moments?.free()
    }
  }

  function run(
    network: NetworkHandle, batch: BatchHandle, loss: LossHandle, moments: MomentsHandle | undefined, rows: number,
    rowsPerStep: number, rate: number, scheme: NetworkScheme, joints: number,
  ): number {
    const squares = new Float64Array(joints)
    const steps = Math.floor(rows / rowsPerStep)
    let sum = 0
    for (let step = 0; step < steps; step++) {
      const range = { from: step * rowsPerStep, to: (step + 1) * rowsPerStep }
      sum += meanOf(kernels.errors(network, batch, range, squares)) / steps
      if (!Number.isFinite(sum)) return Infinity
      if (rate > 0) kernels.step(network, loss, batch, { ...range, scheme, rowsPerStep, rate, moments })
    }
    return sum
  }

  function free(): void {
    freeNetworks()
    for (const batch of batches.values()) batch.free()
    batches.clear()
  }

  return Object.assign(measure, { free })
}

function meanOf(values: Float64Array): number {
  let sum = 0
  for (const value of values) sum += value
  return sum / values.length
}

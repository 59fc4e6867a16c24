import { exp } from '../elementary.ts'
import { learnedCount, type ChainShape, type MetaGradient, type Stretch } from '../meta-gradient.ts'
import { checkLength } from '../shape-error.ts'
import type { Kernels } from './kernels.ts'

/** A `MetaGradient` in f32, with kernel memory of its own. */
export interface KernelMetaGradient extends MetaGradient {
  /** Gives the memory back. */
  free(): void
}

/**
 * The hypergradient of `createMetaGradient` by the SIMD kernels: the same chain and definitions, in f32. It agrees with the
 * double-precision one to about 1e-5 of its largest value and takes a tenth of its time or less. The parameters stay
 * what f32 can hold, so a stream carried on from call to call loses nothing on the way.
 *
 * @param kernels  used for nothing else during a call
 * @param shape  scheme `all` or `last_layer`
 * @throws {RangeError} scheme `bias`: its chain has a handful of values, use `createMetaGradient`
 */
export function createKernelMetaGradient(kernels: Kernels, shape: ChainShape): KernelMetaGradient {
  if (shape.scheme === 'bias') throw new RangeError('Scheme bias has no kernel; use createMetaGradient of meta-gradient.ts.')
  const { network, steps, rowsPerStep, scheme } = shape
  const count = learnedCount(shape)
  const inputs = network.sizes[0]
  const joints = network.sizes.at(-1)!
  const rows = (steps + 1) * rowsPerStep
  const chain = kernels.createChain({ ...shape, scheme })
  const adaptedCount = chain.network.parameterCount
  const theta = new Float32Array(adaptedCount)

  function compute(stretch: Stretch, adapted: Float64Array, learned: Float64Array, gradient: Float64Array): number {
    const because = `${steps} steps and one batch after them, of ${rowsPerStep} rows`
    checkLength('x', stretch.x.length, rows * inputs, because)
    checkLength('measured', stretch.measured.length, rows * joints, because)
    checkLength('adapted', adapted.length, adaptedCount, 'the network has that many parameters')
    checkLength('learned', learned.length, count, `loss ${shape.loss}, scheme ${scheme}`)
    checkLength('gradient', gradient.length, count, 'one per learned value')
    chain.batch.loadNormalised(stretch.x, stretch.measured, rows)
    chain.network.write(adapted)
    chain.loss.write(learned.subarray(0, count - 1))
    const outer = chain.run(exp(learned[count - 1]), gradient)
    chain.network.read(theta)
    adapted.set(theta)
    return outer
  }

  return { shape, adaptedCount, learnedCount: count, compute, free: () => chain.free() }
}

import type { Kernels, NetworkHandle } from '../kernels/kernels.ts'
import { lossShapeOf } from '../loss-version.ts'
import { lossKinds } from '../losses/index.ts'
import { backward, createNetworkPass, firstTrainedLayer, forward } from '../network.ts'
import { updateKinds } from '../updates/index.ts'
import type { AdaptationInputs } from './adaptation.ts'
import type { ByteReader, Bytes } from './bytes.ts'
import type { Rows } from './learner.ts'

/** Gradient steps on a network in kernel memory. */
export interface NetworkSteps {
  createMemory(): Memory
  /** Steps of rowsPerStep rows through the batch's first `rows` rows, in place. */
  learn(network: NetworkHandle, memory: Memory, batch: Rows, rows: number): void
  distance(a: NetworkHandle, b: NetworkHandle): number
  weights(batch: Rows, predicted: Float64Array, out: Float64Array): void
  release(): void
}

/** What the update remembers from step to step. */
export interface Memory {
  copyFrom(other: Memory): void
  clear(): void
  write(bytes: Bytes): void
  read(bytes: ByteReader): void
  free(): void
}

class ArrayMemory implements Memory {
  constructor(readonly values: Float64Array, readonly initial: Float64Array) {}
  copyFrom(other: Memory): void { this.values.set((other as ArrayMemory).values) }
  clear(): void { this.values.set(this.initial) }
  write(bytes: Bytes): void { bytes.float64s(this.values) }
  read(bytes: ByteReader): void { bytes.float64s(this.values) }
  free(): void {}
}

export function createNetworkSteps(_kernels: Kernels, { version, loss, settings }: AdaptationInputs): NetworkSteps {
  const { joints, network: shape } = version.description
  const { kind, rate, rowsPerStep } = settings.update
  const from = firstTrainedLayer(shape, settings.scheme as 'all' | 'last_layer')
  const pass = createNetworkPass(shape, 1024)
  const update = updateKinds[kind]
  const count = version.parameters.length
  const lossShape = loss === 'mse' ? { joints, inputs: 3 * joints, hidden: 0, positive: 'exp' as const } : lossShapeOf(loss.description)
  const phi = loss === 'mse' ? new Float64Array(0) : Float64Array.from(loss.parameters)
  const evaluator = lossKinds[loss === 'mse' ? 'mse' : loss.description.kind].create(lossShape, 1024)
  const single = new Float32Array(count)
  const other = new Float32Array(count)
  const parameters = new Float64Array(count)
  const gradient = new Float64Array(count)
  const y = new Float64Array(1024 * joints)
  const dy = new Float64Array(1024 * joints)
  return {
    createMemory: () => new ArrayMemory(update.initialState(count), update.initialState(count)),
    learn(network, memory, batch, rows) {
      network.read(single)
      parameters.set(single)
      for (let start = 0; start < rows; start += rowsPerStep) {
        const used = Math.min(rowsPerStep, rows - start)
        const x = Float64Array.from(batch.x.subarray(start * 3 * joints, (start + used) * 3 * joints))
        const measured = Float64Array.from(batch.measured32.subarray(start * joints, (start + used) * joints))
        forward(pass, parameters, x, used, y)
        evaluator.gradient(phi, { rows: used, x, measured, predicted: y }, dy)
        backward(pass, parameters, dy, from, gradient)
        update.step(parameters, gradient, (memory as ArrayMemory).values, rate)
        for (let k = 0; k < count; k++) parameters[k] = Math.fround(parameters[k])
      }
      network.write(parameters)
    },
    distance(a, b) {
      a.read(single)
      b.read(other)
      let sum = 0
      for (let k = 0; k < count; k++) sum += (single[k] - other[k]) * (single[k] - other[k])
      return Math.sqrt(sum)
    },
    weights(batch, predicted, out) {
      const x = Float64Array.from(batch.x.subarray(0, batch.rows * 3 * joints))
      evaluator.weights(phi, { rows: batch.rows, x, measured: batch.measured, predicted }, out)
    },
    release() {},
  }
}

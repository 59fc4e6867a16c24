import { fade } from '../deterministic.ts'
import type { Kernels } from '../kernels/kernels.ts'
import { lossShapeOf } from '../loss-version.ts'
import { lossKinds } from '../losses/index.ts'
import { updateKinds } from '../updates/index.ts'
import type { AdaptationInputs } from './adaptation.ts'
import type { Learned, Learner, Rows } from './learner.ts'
import { createReference } from './reference.ts'

interface LearnedBias extends Learned {
  readonly bias: Float64Array
  readonly memory: Float64Array
}

/**
 * Scheme `bias`: ŷ(t + h) = base(x) + ρ^h b, b per joint in double precision. A group of rowsPerStep rows first lets b fade
 * up to its newest row, then steps on the loss of base(x) + b over the group.
 */
export function createBiasLearner(kernels: Kernels, { version, loss, settings }: AdaptationInputs): Learner {
  const { joints, network: shape } = version.description
  const { rate, rowsPerStep, kind, fade: share } = settings.update
  const network = kernels.loadNetwork(shape, version.parameters)
  const reference = createReference(kernels, version)
  const update = updateKinds[kind]
  const lossShape = loss === 'mse' ? { joints, inputs: 3 * joints, hidden: 0, positive: 'exp' as const } : lossShapeOf(loss.description)
  const phi = loss === 'mse' ? new Float64Array(0) : Float64Array.from(loss.parameters)
  const kindOfLoss = lossKinds[loss === 'mse' ? 'mse' : loss.description.kind]
  const stepLoss = kindOfLoss.create(lossShape, rowsPerStep)
  const idle: LearnedBias[] = []
  const biasGradient = new Float64Array(joints)
  const stepRows = { x: new Float64Array(rowsPerStep * 3 * joints), y: new Float64Array(rowsPerStep * joints) }
  const stepMeasured = new Float64Array(rowsPerStep * joints)
  const outputGradient = new Float64Array(rowsPerStep * joints)
  const initialMemory = update.initialState(joints)
  const baseReference = reference.create()
  reference.predict(network, baseReference)
  let outputs = new Float32Array(64 * joints)
  let batchLoss = kindOfLoss.create(lossShape, 64)
  let batchX = new Float64Array(64 * 3 * joints)

  function make(): LearnedBias {
    return {
      network, bias: new Float64Array(joints), memory: initialMemory.slice(), reference: baseReference.slice(), asOf: NaN, uses: 0,
    }
  }

  function evaluateBase(batch: Rows, from: number, rows: number): void {
    if (outputs.length < rows * joints) outputs = new Float32Array(2 * rows * joints)
    kernels.forward(network, batch.x.subarray(from * 3 * joints, (from + rows) * 3 * joints), rows, outputs)
  }

  function addToReference(learned: LearnedBias): void {
    for (let k = 0; k < baseReference.length; k++) learned.reference[k] = baseReference[k] + learned.bias[k % joints]
  }

  function age(learned: Learned, time: number): void {
    const { bias } = learned as LearnedBias
    if (time > learned.asOf) {
      const left = fade(share, time - learned.asOf)
      for (let j = 0; j < joints; j++) bias[j] *= left
    }
    learned.asOf = time
    addToReference(learned as LearnedBias)
  }

  function copy(from: Learned, into: Learned): void {
    (into as LearnedBias).bias.set((from as LearnedBias).bias);
    (into as LearnedBias).memory.set((from as LearnedBias).memory)
    into.asOf = from.asOf
  }

  /** One step on rows start..start+used of the batch, whose base prediction lies in `outputs`. */
  function step(learned: LearnedBias, batch: Rows, start: number, used: number): void {
    const { x, y } = stepRows
    for (let k = 0; k < used * 3 * joints; k++) x[k] = batch.x[start * 3 * joints + k]
    for (let k = 0; k < used * joints; k++) {
      y[k] = outputs[start * joints + k] + learned.bias[k % joints]
      stepMeasured[k] = batch.measured[start * joints + k]
    }
    stepLoss.gradient(phi, { rows: used, x, measured: stepMeasured, predicted: y }, outputGradient)
    biasGradient.fill(0)
    for (let k = 0; k < used * joints; k++) biasGradient[k % joints] += outputGradient[k]
    update.step(learned.bias, biasGradient, learned.memory, rate)
  }

  const base = make()
  base.uses = 1

  return {
    base,
    take: () => idle.pop() ?? make(),
    giveBack: learned => void idle.push(learned as LearnedBias),
    predict(learned, batch, from, to, out) {
      const { bias } = learned as LearnedBias
      evaluateBase(batch, from, to - from)
      for (let row = from, k = 0; row < to; row++) {
        const left = batch.time[row] > learned.asOf ? fade(share, batch.time[row] - learned.asOf) : 1
        for (let j = 0; j < joints; j++, k++) out[row * joints + j] = outputs[k] + left * bias[j]
      }
    },
    learn(from, batch, rows, into) {
      copy(from, into)
      evaluateBase(batch, 0, rows)
      for (let start = 0; start < rows; start += rowsPerStep) {
        const used = Math.min(rowsPerStep, rows - start)
        age(into, batch.time[start + used - 1])
        step(into as LearnedBias, batch, start, used)
      }
      addToReference(into as LearnedBias)
    },
    age,
    restart(from, into) {
      copy(from, into);
      (into as LearnedBias).memory.set(initialMemory)
      addToReference(into as LearnedBias)
    },
    distance(a, b) {
      let sum = 0
      for (let j = 0; j < joints; j++) {
        const difference = (a as LearnedBias).bias[j] - (b as LearnedBias).bias[j]
        sum += difference * difference
      }
      return Math.sqrt(sum)
    },
    weights(batch, predicted, out) {
      if (batchX.length < batch.rows * 3 * joints) {
        batchX = new Float64Array(batch.rows * 3 * joints)
        batchLoss = kindOfLoss.create(lossShape, batch.rows)
      }
      for (let k = 0; k < batch.rows * 3 * joints; k++) batchX[k] = batch.x[k]
      batchLoss.weights(phi, { rows: batch.rows, x: batchX, measured: batch.measured, predicted }, out)
    },
    write(learned, bytes) {
      bytes.float64(learned.asOf)
      bytes.float64s((learned as LearnedBias).bias)
      bytes.float64s((learned as LearnedBias).memory)
    },
    read(bytes, into) {
      into.asOf = bytes.float64()
      bytes.float64s((into as LearnedBias).bias)
      bytes.float64s((into as LearnedBias).memory)
      addToReference(into as LearnedBias)
    },
    release: () => network.free(),
  }
}

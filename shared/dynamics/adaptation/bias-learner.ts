import { fade } from '../deterministic.ts'
import type { Kernels } from '../kernels/kernels.ts'
import { updateKinds } from '../updates/index.ts'
import type { AdaptationInputs } from './adaptation.ts'
import type { Learned, Learner, Rows } from './learner.ts'
import { loadLossOf } from './loss-of.ts'
import { createReference } from './reference.ts'

interface LearnedBias extends Learned {
  readonly bias: Float64Array
  /** What the update remembers, as in `updates`. */
  readonly memory: Float64Array
}

/**
 * Scheme `bias`: ŷ(t + h) = base(x) + ρ^h b, b per joint in double precision. A group of rowsPerStep rows first lets b fade
 * up to its newest row, then steps on the loss of base(x) + b over the group.
 */
export function createBiasLearner(kernels: Kernels, inputs: AdaptationInputs): Learner {
  const { version, settings } = inputs
  const { joints, network: shape } = version.description
  const { rate, rowsPerStep, kind, fade: share } = settings.update
  const network = kernels.loadNetwork(shape, version.parameters)
  const reference = createReference(kernels, version)
  const baseReference = reference.create()
  reference.predict(network, baseReference)
  const loss = loadLossOf(kernels, inputs)
  const update = updateKinds[kind]
  const initialMemory = update.initialState(joints)
  const idle: LearnedBias[] = []
  const squares = new Float64Array(joints)
  const gradient = new Float64Array(joints)
  const stepWeights = new Float64Array(joints)
  let outputs = new Float32Array(64 * joints)
  let predicted = new Float64Array(64 * joints)
  let slope = new Float32Array(64 * joints)

  function make(): LearnedBias {
    return {
      network,
      bias: new Float64Array(joints),
      memory: initialMemory.slice(),
      reference: baseReference.slice(),
      asOf: NaN,
      uses: 0,
    }
  }

  function evaluateBase(batch: Rows, from: number, to: number): void {
    const values = (to - from) * joints
    if (outputs.length < values) {
      outputs = new Float32Array(2 * values)
      predicted = new Float64Array(2 * values)
      slope = new Float32Array(2 * values)
    }
    kernels.errors(network, batch.handle, { from, to }, squares, outputs)
  }

  function addToReference({ reference: sum, bias }: LearnedBias): void {
    for (let k = 0, j = 0; k < sum.length; k++, j = j + 1 === joints ? 0 : j + 1) sum[k] = baseReference[k] + bias[j]
  }

  function letFade(learned: LearnedBias, time: number): void {
    if (time > learned.asOf) {
      const left = fade(share, time - learned.asOf)
      for (let j = 0; j < joints; j++) learned.bias[j] *= left
    }
    learned.asOf = time
  }

  function copy(from: Learned, into: Learned): void {
    ;(into as LearnedBias).bias.set((from as LearnedBias).bias)
    ;(into as LearnedBias).memory.set((from as LearnedBias).memory)
    into.asOf = from.asOf
  }

  /** One step on rows from..to of the batch; the base's prediction of the batch lies in `outputs`. */
  function step({ bias, memory }: LearnedBias, batch: Rows, from: number, to: number): void {
    const values = (to - from) * joints
    for (let k = 0; k < values; k++) predicted[k] = outputs[from * joints + k] + bias[k % joints]
    kernels.predictionGradient(loss, batch.handle, { from, to }, predicted, slope, stepWeights)
    gradient.fill(0)
    for (let k = 0; k < values; k++) gradient[k % joints] += slope[k]
    update.step(bias, gradient, memory, rate)
  }

  const base = make()
  base.uses = 1

  return {
    base,
    take: () => idle.pop() ?? make(),
    giveBack: learned => void idle.push(learned as LearnedBias),
    predict(learned, batch, from, to, out) {
      const { bias } = learned as LearnedBias
      evaluateBase(batch, from, to)
      for (let row = from, k = 0; row < to; row++) {
        const left = batch.time[row] > learned.asOf ? fade(share, batch.time[row] - learned.asOf) : 1
        for (let j = 0; j < joints; j++, k++) out[row * joints + j] = outputs[k] + left * bias[j]
      }
    },
    learn(from, batch, rows, into) {
      copy(from, into)
      evaluateBase(batch, 0, rows)
      for (let start = 0; start < rows; start += rowsPerStep) {
        const end = Math.min(start + rowsPerStep, rows)
        letFade(into as LearnedBias, batch.time[end - 1])
        step(into as LearnedBias, batch, start, end)
      }
      addToReference(into as LearnedBias)
    },
    age(learned, time) {
      letFade(learned as LearnedBias, time)
      addToReference(learned as LearnedBias)
    },
    restart(from, into) {
      copy(from, into)
      ;(into as LearnedBias).memory.set(initialMemory)
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
    weights(learned, batch, out) {
      if (loss.name !== 'unstructured') return void kernels.meanWeights(loss, batch.handle, {}, out)
      this.predict(learned, batch, 0, batch.rows, predicted)
      kernels.predictionGradient(loss, batch.handle, {}, predicted, slope, out)
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
    release() {
      network.free()
      loss.free()
    },
  }
}

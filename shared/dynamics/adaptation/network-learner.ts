import type { Kernels, MomentsHandle } from '../kernels/kernels.ts'
import type { AdaptationInputs } from './adaptation.ts'
import type { Learned, Learner, Rows } from './learner.ts'
import { loadLossOf } from './loss-of.ts'
import { createReference } from './reference.ts'

interface LearnedNetwork extends Learned {
  /** Adam's; null under sgd. */
  readonly moments: MomentsHandle | null
}

/** Schemes `all` and `last_layer`: gradient steps on the network's own parameters. */
export function createNetworkLearner(kernels: Kernels, inputs: AdaptationInputs): Learner {
  const { version, settings } = inputs
  const { joints, network: shape } = version.description
  const { rate, rowsPerStep, kind } = settings.update
  const scheme = settings.scheme === 'all' ? 'all' : 'last_layer'
  const loss = loadLossOf(kernels, inputs)
  const reference = createReference(kernels, version)
  const every: LearnedNetwork[] = []
  const idle: LearnedNetwork[] = []
  const raw = new Float32Array(version.parameters.length)
  const squares = new Float64Array(joints)
  let outputs = new Float32Array(64 * joints)

  function make(): LearnedNetwork {
    const network = kernels.loadNetwork(shape, version.parameters)
    const moments = kind === 'adam' ? kernels.createMoments(network) : null
    const learned = { network, moments, bias: null, reference: reference.create(), asOf: NaN, uses: 0 }
    every.push(learned)
    return learned
  }

  const base = make()
  base.uses = 1
  reference.predict(base.network, base.reference)

  function copy(from: Learned, into: Learned): void {
    into.network.copyFrom(from.network)
    into.asOf = from.asOf
    copyMoments(from, into)
  }

  function copyMoments(from: Learned, into: Learned): void {
    const { moments } = from as LearnedNetwork
    if (moments) (into as LearnedNetwork).moments!.copyFrom(moments)
  }

  return {
    base,
    take: () => idle.pop() ?? make(),
    giveBack: learned => void idle.push(learned as LearnedNetwork),
    predict({ network }: Learned, batch: Rows, from: number, to: number, out: Float64Array): void {
      const values = (to - from) * joints
      if (outputs.length < values) outputs = new Float32Array(2 * values)
      kernels.errors(network, batch.handle, { from, to }, squares, outputs)
      for (let k = 0; k < values; k++) out[from * joints + k] = outputs[k]
    },
    learn(from, batch, rows, into) {
      copy(from, into)
      const moments = (into as LearnedNetwork).moments ?? undefined
      kernels.step(into.network, loss, batch.handle, { scheme, rowsPerStep, rate, moments, to: rows })
      into.asOf = batch.time[rows - 1]
      reference.predict(into.network, into.reference)
    },
    age: (learned, time) => {
      learned.asOf = time
    },
    restart(from, into) {
      copy(from, into)
      copyMoments(base, into)
      into.reference.set(from.reference)
    },
    distance: (a, b) => kernels.distance(a.network, b.network),
    weights: (learned, batch, out) => void kernels.meanWeights(loss, batch.handle, {}, out, learned.network),
    write(learned, bytes) {
      const { network, moments, asOf } = learned as LearnedNetwork
      bytes.float64(asOf)
      bytes.float32s(network.read(raw))
      if (!moments) return
      const state = moments.read()
      bytes.float64s(state.subarray(0, 2))
      bytes.float32s(Float32Array.from(state.subarray(2)))
    },
    read(bytes, into) {
      into.asOf = bytes.float64()
      bytes.float32s(raw)
      into.network.write(raw)
      reference.predict(into.network, into.reference)
      const { moments } = into as LearnedNetwork
      if (!moments) return
      const state = new Float64Array(2 + 2 * raw.length)
      bytes.float64s(state.subarray(0, 2))
      const values = new Float32Array(2 * raw.length)
      bytes.float32s(values)
      state.set(values, 2)
      moments.write(state)
    },
    release() {
      for (const { network, moments } of every) {
        network.free()
        moments?.free()
      }
      loss.free()
    },
  }
}

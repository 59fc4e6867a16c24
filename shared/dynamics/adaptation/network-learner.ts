import type { NetworkHandle } from '../kernels/kernels.ts'
import type { Kernels } from '../kernels/kernels.ts'
import type { AdaptationInputs } from './adaptation.ts'
import type { Learned, Learner, Rows } from './learner.ts'
import { createNetworkSteps } from './network-steps.ts'
import type { Memory } from './network-steps.ts'
import { createReference } from './reference.ts'

interface LearnedNetwork extends Learned {
  readonly memory: Memory
}

/** Schemes `all` and `last_layer`: gradient steps on the network's own parameters. */
export function createNetworkLearner(kernels: Kernels, inputs: AdaptationInputs): Learner {
  const { version } = inputs
  const { joints, network: shape } = version.description
  const steps = createNetworkSteps(kernels, inputs)
  const reference = createReference(kernels, version)
  const every: LearnedNetwork[] = []
  const idle: LearnedNetwork[] = []
  const raw = new Float32Array(version.parameters.length)
  let outputs = new Float32Array(64 * joints)

  function make(): LearnedNetwork {
    const network: NetworkHandle = kernels.loadNetwork(shape, version.parameters)
    const learned = { network, bias: null, memory: steps.createMemory(), reference: reference.create(), asOf: NaN, uses: 0 }
    every.push(learned)
    return learned
  }

  const base = make()
  base.uses = 1
  reference.predict(base.network, base.reference)

  function predict({ network }: Learned, batch: Rows, from: number, to: number, out: Float64Array): void {
    const rows = to - from
    if (outputs.length < rows * joints) outputs = new Float32Array(2 * rows * joints)
    kernels.forward(network, batch.x.subarray(from * 3 * joints, to * 3 * joints), rows, outputs)
    for (let k = 0; k < rows * joints; k++) out[from * joints + k] = outputs[k]
  }

  function copy(from: Learned, into: LearnedNetwork): void {
    into.network.copyFrom(from.network)
    into.memory.copyFrom(from.memory as Memory)
    into.asOf = from.asOf
  }

  return {
    base,
    take: () => idle.pop() ?? make(),
    giveBack: learned => void idle.push(learned as LearnedNetwork),
    predict,
    learn(from, batch, rows, into) {
      copy(from, into as LearnedNetwork)
      steps.learn(into.network, into.memory as Memory, batch, rows)
      into.asOf = batch.time[rows - 1]
      reference.predict(into.network, into.reference)
    },
    age: (learned, time) => { learned.asOf = time },
    restart(from, into) {
      copy(from, into as LearnedNetwork);
      (into.memory as Memory).clear()
      into.reference.set(from.reference)
    },
    distance: (a, b) => steps.distance(a.network, b.network),
    weights: steps.weights,
    write({ network, memory, asOf }, bytes) {
      bytes.float64(asOf)
      bytes.float32s(network.read(raw));
      (memory as Memory).write(bytes)
    },
    read(bytes, into) {
      into.asOf = bytes.float64()
      bytes.float32s(raw)
      into.network.write(raw);
      (into.memory as Memory).read(bytes)
      reference.predict(into.network, into.reference)
    },
    release() {
      for (const { network, memory } of every) {
        network.free()
        memory.free()
      }
      steps.release()
    },
  }
}

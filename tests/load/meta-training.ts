import { once } from 'node:events'
import type { JobInput, WorkerMessage, WorkerStart } from '../../server/jobs/worker-messages.ts'
import { startThread } from '../../server/thread.ts'
import { encodeVersion } from '../../shared/dynamics/index.ts'
import { defaultMetaTrainingOptions } from '../../shared/dynamics/meta-training.ts'
import { simulatedMotion, untrainedVersion } from '../support/served-model.ts'

/**
 * A meta-training in the thread that the product's job queue would start for it, on simulated recordings.
 *
 * @param niceness  of the thread, as the queue sets it
 * @returns once it computes: what ends it
 */
export async function startMetaTraining(joints: number, niceness: number): Promise<() => Promise<void>> {
  const { scheme, loss, positive, hidden, updates, innerSteps, streams, rowsPerStep, seed } = defaultMetaTrainingOptions
  const input: JobInput = {
    kind: 'meta_train',
    parameters: {
      kind: 'meta_train', loss: 'load', version: 1, recordings: [], validation: [], scheme, positive, hidden, updates, innerSteps, streams,
      rowsPerStep, seed,
    },
    lossKind: loss,
    base: encodeVersion(untrainedVersion({ joints, hidden: [64, 64] })),
    baseChecksum: '',
    training: [1, 2, 3, 4].map((k) => motion(joints, 3000, k)),
    validation: [motion(joints, 3000, 5)],
  }
  const start: WorkerStart = { input, niceness, cancel: new SharedArrayBuffer(4) }
  const thread = startThread(new URL('../../server/jobs/worker.ts', import.meta.url), start)
  const [first] = (await once(thread, 'message')) as [WorkerMessage]
  if (first.kind === 'failed') throw new Error(`The meta-training failed: ${first.detail}`)
  let isEnding = false
  thread.on('exit', () => {
    if (!isEnding) throw new Error('The meta-training ended before the measurement did.')
  })
  return async () => {
    isEnding = true
    await thread.terminate()
  }
}

function motion(joints: number, rows: number, seed: number) {
  const { time, position, velocity, acceleration, torque } = simulatedMotion({ joints, rows, seed, payload: seed / 2 })
  return {
    name: `simulated ${seed}`,
    rows,
    time: Float64Array.from(time),
    states: Float64Array.from(position.flatMap((row, k) => [...row, ...velocity[k], ...acceleration[k]])),
    torque: Float64Array.from(torque.flat()),
  }
}

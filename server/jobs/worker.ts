import { setPriority } from 'node:os'
import { parentPort, workerData } from 'node:worker_threads'
import { Refusal } from '../../shared/contract/problems.ts'
import {
  JobCancelled,
  type JobInput,
  type JobOutput,
  type JobReport,
  type WorkerMessage,
  type WorkerStart,
} from './worker-messages.ts'

const port = parentPort!
const { input, niceness, cancel } = workerData.data as WorkerStart
// On Linux a priority belongs to the thread that sets it (setpriority(2), notes); elsewhere it is the process's, which
// must not be slowed down.
if (process.platform === 'linux' && niceness > 0) setPriority(0, niceness)
const flag = new Int32Array(cancel)
const send = (message: WorkerMessage) => port.postMessage(message)

const report: JobReport = {
  progress: (progress, message) => send({ kind: 'progress', progress: Math.min(1, Math.max(0, progress)), message }),
  point: (series, x, y) => send({ kind: 'point', series, x, y }),
  throwIfCancelled() {
    if (Atomics.load(flag, 0) !== 0) throw new JobCancelled()
  },
}

type Handler<K extends JobInput['kind']> = (input: JobInput & { kind: K }, report: JobReport) => JobOutput | Promise<JobOutput>

/** Loaded when needed: tfjs alone takes a second, and a meta-training has no use for it. */
const handlers: { [K in JobInput['kind']]: () => Promise<Handler<K>> } = {
  fit: async () => (await import('./fit.ts')).runFit,
  meta_train: async () => (await import('./meta-train.ts')).runMetaTrain,
}

try {
  const handler = (await handlers[input.kind]()) as (input: JobInput, report: JobReport) => JobOutput | Promise<JobOutput>
  const output = await handler(input, report)
  send({ kind: 'done', output })
} catch (error) {
  if (error instanceof JobCancelled) send({ kind: 'cancelled' })
  else if (error instanceof Refusal) send({ kind: 'failed', slug: error.kind.slug, detail: error.message })
  // What the training code refuses by RangeError or ShapeError is about the recordings it was given.
  else if (error instanceof RangeError)
    send({ kind: 'failed', slug: 'recordings-unsuitable', detail: error.message, stack: error.stack })
  else
    send({
      kind: 'failed',
      slug: 'internal',
      detail: 'This is our mistake and has been logged. Start the job again.',
      stack: (error as Error).stack,
    })
}
// Not closed by itself while tfjs keeps handles of its own.
port.close()

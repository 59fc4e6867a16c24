import { Worker } from 'node:worker_threads'

/**
 * A worker thread that runs a TypeScript module, which reads `workerData.data`.
 *
 * @param module  its file URL
 * @param niceness  added to the thread's priority number: 10 lets the event loop's thread go first
 */
export function startThread(module: URL, data: unknown, transfer: ArrayBuffer[] = []): Worker {
  return new Worker(new URL('./thread-entry.mjs', import.meta.url), {
    workerData: { module: module.href, data },
    transferList: transfer,
    // What the process was started with (loaders, inspectors) is not for the thread.
    execArgv: [],
  })
}

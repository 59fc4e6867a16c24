import type { Worker } from 'node:worker_threads'
import { Refusal } from '../../../shared/contract/problems.ts'
import { startThread } from '../../thread.ts'
import type { RecordedJoint } from './csv-columns.ts'
import type { ReadSummary } from './csv-reader.ts'
import type { ReaderAnswer, ReaderMessage } from './csv-thread-messages.ts'

/** Reads recordings in a thread of its own: 200 MB of text are ten seconds of work, which predictions must not wait for. */
export interface CsvReading {
  /** As readRecording, elsewhere. */
  read(
    source: AsyncIterable<Uint8Array>,
    joints: readonly RecordedJoint[],
    store: (chunk: ArrayBuffer) => Promise<void>,
  ): Promise<ReadSummary>
  stop(): Promise<void>
}

/** Pieces of a file that may be under way to the thread at a time. */
const UNDER_WAY = 8
const IDLE_MS = 60_000

interface Listener {
  (answer: ReaderAnswer): void
}

export function createCsvReading(): CsvReading {
  const listeners = new Map<number, Listener>()
  let thread: Worker | undefined
  let next = 1
  let idle: NodeJS.Timeout | undefined

  function running(): Worker {
    clearTimeout(idle)
    if (thread) return thread
    const started = startThread(new URL('./csv-thread.ts', import.meta.url), undefined)
    started.unref()
    started.on('message', (answer: ReaderAnswer) => listeners.get(answer.id)?.(answer))
    started.on('error', (error) => lose(started, error))
    started.on('exit', () => lose(started, new Error('The thread that reads recordings ended.')))
    thread = started
    return started
  }

  function lose(lost: Worker, error: Error): void {
    // One that was ended for idleness may be heard of when its successor is at work.
    if (thread !== lost) return
    thread = undefined
    for (const [id, listener] of listeners) listener({ kind: 'failed', id, message: error.stack ?? error.message })
  }

  function endWhenIdle(): void {
    if (listeners.size > 0) return
    idle = setTimeout(() => {
      void thread?.terminate()
      thread = undefined
    }, IDLE_MS)
    idle.unref()
  }

  return {
    async read(source, joints, store) {
      const worker = running()
      const id = next++
      const send = (message: ReaderMessage, transfer: ArrayBuffer[] = []) => worker.postMessage(message, transfer)
      let underWay = 0
      let wake = () => {}
      let stopped = false
      const result = new Promise<ReadSummary>((resolve, reject) => {
        const settle = (act: () => void) => {
          stopped = true
          wake()
          act()
        }
        // Chunks are stored one after the other: their positions count up.
        let storing = Promise.resolve()
        listeners.set(id, (answer) => {
          if (answer.kind === 'taken') {
            underWay -= 1
            wake()
          } else if (answer.kind === 'chunk') {
            storing = storing.then(() => store(answer.chunk)).then(() => send({ kind: 'stored', id }))
            storing.catch((error: unknown) => settle(() => reject(error as Error)))
          } else if (answer.kind === 'read')
            storing.then(
              () => settle(() => resolve(answer.summary)),
              () => undefined,
            )
          else if (answer.kind === 'refused')
            settle(() => reject(new Refusal(answer.slug, answer.detail, { errors: answer.errors })))
          else settle(() => reject(new Error(`Reading a recording failed: ${answer.message}`)))
        })
      })
      result.catch(() => undefined)
      try {
        send({ kind: 'begin', id, joints })
        for await (const piece of source) {
          while (underWay >= UNDER_WAY && !stopped) await new Promise<void>((resolve) => (wake = resolve))
          if (stopped) break
          underWay += 1
          const copy = Uint8Array.from(piece)
          send({ kind: 'piece', id, piece: copy }, [copy.buffer])
        }
        if (!stopped) send({ kind: 'end', id })
        return await result
      } catch (error) {
        send({ kind: 'abort', id })
        throw error
      } finally {
        listeners.delete(id)
        endWhenIdle()
      }
    },

    async stop() {
      clearTimeout(idle)
      await thread?.terminate()
      thread = undefined
    },
  }
}

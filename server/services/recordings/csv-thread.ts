import { parentPort } from 'node:worker_threads'
import { Refusal } from '../../../shared/contract/problems.ts'
import type { ReaderAnswer, ReaderMessage } from './csv-thread-messages.ts'
import { readRecording } from './csv-reader.ts'

/** Chunks that may wait for the database at a time: what bounds the memory of a reading. */
const UNSTORED = 2

interface Reading {
  push(piece: Uint8Array | null): void
  stored(): void
  abort(): void
}

const port = parentPort!
const readings = new Map<number, Reading>()
const answer = (message: ReaderAnswer, transfer: ArrayBuffer[] = []) => port.postMessage(message, transfer)

port.on('message', (message: ReaderMessage) => {
  const { id } = message
  if (message.kind === 'begin') readings.set(id, begin(id, message.joints))
  else if (message.kind === 'piece') readings.get(id)?.push(message.piece)
  else if (message.kind === 'end') readings.get(id)?.push(null)
  else if (message.kind === 'stored') readings.get(id)?.stored()
  else if (message.kind === 'abort') readings.get(id)?.abort()
})

function begin(id: number, joints: (ReaderMessage & { kind: 'begin' })['joints']): Reading {
  const pieces: (Uint8Array | null)[] = []
  let wake = () => {}
  let unstored = 0
  let wakeStore = () => {}
  let aborted = false

  async function* source() {
    for (;;) {
      while (pieces.length === 0 && !aborted) await new Promise<void>((resolve) => (wake = resolve))
      if (aborted) throw new Error('The upload broke off.')
      const piece = pieces.shift()!
      if (piece === null) return
      yield piece
      answer({ kind: 'taken', id })
    }
  }

  async function store(chunk: ArrayBuffer) {
    while (unstored >= UNSTORED && !aborted) await new Promise<void>((resolve) => (wakeStore = resolve))
    unstored += 1
    answer({ kind: 'chunk', id, chunk }, [chunk])
  }

  readRecording(source(), joints, store)
    .then(
      (summary) => answer({ kind: 'read', id, summary }),
      (error: unknown) => {
        if (error instanceof Refusal)
          answer({ kind: 'refused', id, slug: error.kind.slug, detail: error.message, errors: [...error.errors] })
        else answer({ kind: 'failed', id, message: (error as Error).stack ?? String(error) })
      },
    )
    .finally(() => readings.delete(id))

  return {
    push(piece) {
      pieces.push(piece)
      wake()
    },
    stored() {
      unstored -= 1
      wakeStore()
    },
    abort() {
      aborted = true
      wake()
      wakeStore()
    },
  }
}

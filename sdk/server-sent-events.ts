/** One event of a text/event-stream. */
export interface ServerSentEvent {
  event: string
  data: string
  id: string | undefined
}

/**
 * Reads a text/event-stream body.
 * Source: WHATWG HTML, section 9.2.6, "Interpreting an event stream".
 */
export async function* readEvents(body: ReadableStream<Uint8Array>): AsyncGenerator<ServerSentEvent> {
  const reader = body.pipeThrough(new TextDecoderStream() as ReadableWritablePair<string, Uint8Array>).getReader()
  let rest = ''
  let event = ''
  let data: string[] = []
  let id: string | undefined
  try {
    for (;;) {
      const { done, value } = await reader.read()
      if (done) return
      // A carriage return at the very end may be half of a CRLF: what comes next tells.
      const lines = (rest + value).split(/\r\n|\n|\r(?!$)/)
      rest = lines.pop()!
      for (const line of lines) {
        if (line === '') {
          if (data.length > 0) yield { event: event || 'message', data: data.join('\n'), id }
          event = ''
          data = []
          continue
        }
        const colon = line.indexOf(':')
        if (colon === 0) continue
        const field = colon < 0 ? line : line.slice(0, colon)
        const content = colon < 0 ? '' : line.slice(colon + 1).replace(/^ /, '')
        if (field === 'event') event = content
        else if (field === 'data') data.push(content)
        else if (field === 'id') id = content
      }
    }
  } finally {
    await reader.cancel().catch(() => undefined)
  }
}

import { ConnectionError, ProblemError, TimeoutError } from '../../sdk/index.ts'

export interface Failure {
  title: string
  detail: string
  faults: { where: string; detail: string }[]
  requestId: string | undefined
  retryAfterMs: number | undefined
}

/** What an error says to a person: what is wrong, where, and what to do. */
export function failureOf(error: unknown): Failure {
  const none = { faults: [], requestId: undefined, retryAfterMs: undefined }
  if (error instanceof ProblemError) {
    return {
      title: error.problem?.title ?? `The server answered ${error.status}`,
      detail: error.problem?.detail ?? 'It gave no reason. Something between you and the service may have answered instead.',
      faults: (error.problem?.errors ?? []).map((fault) => ({ where: fault.pointer ?? fault.joint ?? '', detail: fault.detail })),
      requestId: error.requestId,
      retryAfterMs: error.retryAfterMs,
    }
  }
  if (error instanceof TimeoutError) {
    return {
      ...none,
      title: 'No answer in time',
      detail: 'The request may or may not have taken effect. Look at the state before you repeat it.',
    }
  }
  if (error instanceof ConnectionError) {
    return {
      ...none,
      title: 'The service can’t be reached',
      detail: 'Check the network, then try again. Robots keep the state they have.',
    }
  }
  return { ...none, title: 'This page failed', detail: error instanceof Error ? error.message : String(error) }
}

/** What the server said of one field of the body, by its JSON pointer. */
export function faultAt(error: unknown, pointer: string): string | undefined {
  return error instanceof ProblemError ? error.problem?.errors?.find((fault) => fault.pointer === pointer)?.detail : undefined
}

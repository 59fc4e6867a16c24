/**
 * A reason why the server cannot start, told in one sentence with the next move; start-up prints it without a stack trace.
 */
export class StartError extends Error {
  constructor(message: string, cause?: unknown) {
    super(message, cause === undefined ? undefined : { cause })
    this.name = 'StartError'
  }
}

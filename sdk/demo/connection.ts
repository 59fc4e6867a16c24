import { readFileSync } from 'node:fs'
import { join } from 'node:path'
import { ConnectionError, Heftwise, isProblem } from '../index.ts'

/** Something the person at the keyboard can put right; its message says how. */
export class DemoError extends Error {
  override readonly name = 'DemoError'
}

export interface Address {
  readonly url: string
  readonly key: string
}

/**
 * Where the service is and with which key: from HEFTWISE_URL and HEFTWISE_KEY, or from what the first start left in the data
 * folder.
 *
 * @throws {DemoError} neither is there
 */
export function findAddress(environment: NodeJS.ProcessEnv): Address {
  const { HEFTWISE_URL: url, HEFTWISE_KEY: key, HEFTWISE_DATA_DIR: folder = '.data' } = environment
  if (url && key) return { url, key }
  const file = join(folder, 'demo-credentials.json')
  let credentials: { origin?: unknown; api_key?: unknown }
  try {
    credentials = JSON.parse(readFileSync(file, 'utf8')) as typeof credentials
  } catch (cause) {
    throw new DemoError(`${file} cannot be read. Run npm start once, it writes the file; or set HEFTWISE_URL and HEFTWISE_KEY.`, {
      cause,
    })
  }
  const { origin, api_key: apiKey } = credentials
  if (typeof origin !== 'string' || typeof apiKey !== 'string') {
    throw new DemoError(`${file} holds no origin and api_key. Set HEFTWISE_URL and HEFTWISE_KEY instead.`)
  }
  return { url: url ?? origin, key: key ?? apiKey }
}

/**
 * A client, after a look whether the service is up and knows the arm.
 *
 * @throws {DemoError} it is not, or the key is refused
 */
export async function connect(
  { url, key }: Address,
  arm: string,
  signal: AbortSignal,
): Promise<{ heftwise: Heftwise; joints: string }> {
  const heftwise = new Heftwise({ url, key })
  try {
    const { joints_fingerprint: joints } = await heftwise.arms.get(arm, { signal })
    return { heftwise, joints }
  } catch (error) {
    if (error instanceof ConnectionError)
      throw new DemoError(`Heftwise does not answer at ${url}. Start it with npm start, wait for its address, then try again.`)
    if (isProblem(error) && error.status === 401)
      throw new DemoError(
        `Heftwise at ${url} refuses the key. Is it of another data folder? Set HEFTWISE_KEY, or HEFTWISE_DATA_DIR.`,
      )
    if (isProblem(error) && error.status === 404)
      throw new DemoError(
        `Heftwise at ${url} knows no arm "${arm}". The demo's data is made by the first npm start in an empty data folder.`,
      )
    throw error
  }
}

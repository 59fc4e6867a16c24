import { fork } from 'node:child_process'
import type { ChildProcess } from 'node:child_process'
import { mkdtempSync, rmSync } from 'node:fs'
import { tmpdir } from 'node:os'
import { join } from 'node:path'
import { openDatabase } from '../../server/database/connection.ts'
import { migrate } from '../../server/database/migrator.ts'
import { startPrivateMariaDb } from '../../server/database/private-mariadb.ts'
import { createDependencies, startDependencies, stopDependencies } from '../../server/dependencies.ts'
import { createServices } from '../../server/services/index.ts'
import type { Caller } from '../../server/services/permissions.ts'
import { readSettings } from '../../server/settings.ts'
import { serveModel, simulatedMotion } from '../support/served-model.ts'
import type { ServedModel } from '../support/served-model.ts'

export interface ServerProcess {
  readonly port: number
  kill(signal: NodeJS.Signals): Promise<void>
}

/** A MariaDB of the test's own, a team with a model, and server processes to be killed. */
export interface Rig {
  readonly secret: string
  readonly served: ServedModel
  /** SIGKILL; it is started again at once, on the same port, as npm start does. */
  killMariaDb(): void
  startServer(): Promise<ServerProcess>
  newAdaptation(settings?: { scheme?: 'all' | 'last_layer' | 'bias'; update?: { kind: 'sgd' | 'adam'; rate: number } }): Promise<string>
  stop(): Promise<void>
}

export const joints = 3

export async function startRig(): Promise<Rig> {
  const folder = mkdtempSync(join(tmpdir(), 'heftwise-faults-'))
  const mariaDb = await startPrivateMariaDb({ folder: join(folder, 'mariadb'), onRestart: () => undefined })
  const database = openDatabase(mariaDb.address, { models: 2, raw: 2 })
  await migrate(database)
  const settings = readSettings({ HEFTWISE_DATA_DIR: folder, HEFTWISE_LOG_LEVEL: 'silent' })
  const dependencies = createDependencies({ settings, database })
  await startDependencies(dependencies)
  const services = createServices(dependencies)
  const team = await services.people.createTeam({ name: 'faults' })
  const caller: Caller = { kind: 'person', teamId: team.id, id: team.id, name: 'A test', role: 'administrator', sessionId: '' }
  const { secret } = await services.keys.createFor(team.id, { name: 'faults', scopes: ['predict', 'adapt', 'read'] })
  const served = await serveModel({ dependencies, services }, caller, { joints, name: 'faulty' })
  const children = new Set<ChildProcess>()

  return {
    secret,
    served,
    killMariaDb: () => void process.kill(mariaDb.pid, 'SIGKILL'),
    async startServer() {
      const child = fork(join(import.meta.dirname, 'server-process.ts'), { execArgv: ['--import', 'tsx'], env: { ...process.env, HEFTWISE_DATA_DIR: folder } })
      children.add(child)
      const ended = new Promise<void>((done) => child.once('exit', () => {
        children.delete(child)
        done()
      }))
      child.send(mariaDb.address)
      const port = await new Promise<number>((resolve, reject) => {
        child.once('message', (message) => resolve(message as number))
        child.once('exit', (code) => reject(new Error(`The server process ended with ${code}.`)))
      })
      return {
        port,
        kill(signal) {
          child.kill(signal)
          return ended
        },
      }
    },
    async newAdaptation(settings = {}) {
      const { record } = await services.adaptations.create(caller, { model: 'faulty', loss: 'mse', robot: 'victim', update: { kind: 'adam', rate: 0.002 }, ...settings })
      return record.id
    },
    async stop() {
      for (const child of children) child.kill('SIGKILL')
      await services.adaptations.stop().catch(() => undefined)
      await stopDependencies(dependencies).catch(() => undefined)
      await database.close().catch(() => undefined)
      await mariaDb.stop()
      rmSync(folder, { recursive: true, force: true })
    },
  }
}

/** The k-th batch of one long motion. */
export function batchBody({ fingerprint }: ServedModel, sequence: number, rows: number): string {
  return JSON.stringify({
    joints: fingerprint, sequence, acceleration_kind: 'filtered', ...simulatedMotion({ joints, rows, start: sequence * rows * 0.02, payload: 1, seed: 3 }),
  })
}

export interface Answer {
  readonly status: number
  readonly body: any
}

export async function ask(port: number, secret: string, method: string, path: string, body?: string): Promise<Answer> {
  const response = await fetch(`http://127.0.0.1:${port}${path}`, {
    method, body, headers: { authorization: `Bearer ${secret}`, ...(body !== undefined && { 'content-type': 'application/json' }) }, signal: AbortSignal.timeout(20_000),
  })
  return { status: response.status, body: await response.json() }
}

/**
 * Posts batches one after the other as a controller would: what got no answer, or a 503, is sent again under its sequence.
 *
 * @param portOf  where to send the next attempt
 * @returns the answer to each sequence, and how often an attempt failed
 */
export async function streamBatches(
  { secret, served }: Rig, id: string, { from = 1, to, rows = 16, portOf, onAnswer }: {
    from?: number
    to: number
    rows?: number
    portOf: () => number
    onAnswer?: (sequence: number) => void
  },
): Promise<{ answers: any[]; failures: number }> {
  const answers: any[] = []
  let failures = 0
  for (let sequence = from; sequence <= to; sequence++) {
    const body = batchBody(served, sequence, rows)
    for (let attempt = 1; ; attempt++) {
      const answer = await ask(portOf(), secret, 'POST', `/v1/adaptations/${id}/batches`, body).catch(() => undefined)
      if (answer?.status === 200) {
        answers.push(answer.body)
        onAnswer?.(sequence)
        break
      }
      failures++
      if (answer !== undefined && answer.status !== 503) throw new Error(`Batch ${sequence} was answered ${answer.status}: ${JSON.stringify(answer.body)}`)
      if (attempt > 300) throw new Error(`Batch ${sequence} found no server after ${attempt} attempts: ${JSON.stringify(answer?.body)}`)
      await new Promise((done) => setTimeout(done, 100))
    }
  }
  return { answers, failures }
}

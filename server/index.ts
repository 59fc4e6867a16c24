import { readFileSync } from 'node:fs'
import { createServer } from 'node:http'
import type { Server } from 'node:http'
import type { AddressInfo } from 'node:net'
import { createApp } from './app.ts'
import { lockDataFolder } from './data-folder-lock.ts'
import { databaseErrno, openDatabase, requireDatabase } from './database/connection.ts'
import { migrate } from './database/migrator.ts'
import { startPrivateMariaDb } from './database/private-mariadb.ts'
import { seedDemo } from './demo/seed.ts'
import { demoCredentials, prepareDemo, recordSeeded } from './demo/team.ts'
import { createDependencies, createLog, startDependencies, stopDependencies } from './dependencies.ts'
import { diskFull, isDiskFull } from './disk-space.ts'
import { createServices, startServices, stopServices } from './services/index.ts'
import { readSettings } from './settings.ts'
import type { Settings } from './settings.ts'
import { StartError } from './start-error.ts'

/** How long requests may take to end once the server has been told to stop. */
const drainMs = 10_000

/**
 * The process from start to stop: settings, database, services, then requests; and in reverse on SIGINT and SIGTERM.
 * What was started before a step that fails is stopped again.
 * @throws {StartError} told in one sentence
 */
export async function run(): Promise<void> {
  const settings = readSettings()
  const log = createLog(settings)
  const undo: (() => unknown)[] = []
  const stop = async () => {
    for (const step of undo.splice(0).reverse()) await Promise.resolve(step()).catch((error: unknown) => log.error({ err: error }, 'a step of stopping failed'))
  }
  let stoppingSince: number | undefined
  const stopAndExit = (code: number) => {
    // npm passes on a Ctrl-C that the terminal has sent to us too; a second one later is meant.
    if (stoppingSince !== undefined && performance.now() - stoppingSince > 2_000) process.exit(1)
    if (stoppingSince !== undefined) return
    stoppingSince = performance.now()
    void stop().then(() => process.exit(code))
  }
  process.on('SIGINT', () => stopAndExit(0))
  process.on('SIGTERM', () => stopAndExit(0))
  // A terminal that closes; under nohup, which has it ignored, the server goes on.
  if (!ignoresHangUp()) process.on('SIGHUP', () => stopAndExit(0))
  process.on('uncaughtException', (error) => {
    log.fatal({ err: error }, 'a mistake of ours ended the process')
    stopAndExit(1)
  })

  try {
    undo.push(lockDataFolder(settings.dataFolder))
    // The port first: when it is taken, that is told at once. Until all is up, requests are asked to wait.
    const http = createServer(notReady)
    // Longer than proxies and clients keep idle connections, so that none is closed just as a request is sent on it.
    http.keepAliveTimeout = 75_000
    // A recording of 200 MB over a slow line; headers still have a minute.
    http.requestTimeout = 1_800_000
    await listen(http, settings)
    undo.push(() => drain(http))
    const { port } = http.address() as AddressInfo
    const origin = settings.origin ?? `http://${settings.host.includes(':') ? `[${settings.host}]` : settings.host}:${port}`

    const address = settings.databaseAddress ?? (await startOwnDatabase())
    await requireDatabase(address)
    const database = openDatabase(address)
    undo.push(() => database.close())
    await migrate(database)
    const d = createDependencies({ settings, database, log })
    await startDependencies(d)
    undo.push(() => stopDependencies(d))
    const services = createServices(d)
    const app = createApp(d, services)
    await startServices(services)
    undo.push(() => stopServices(services))

    const seeder = await prepareDemo(d, services, origin)
    if (seeder) {
      await seedDemo(services, seeder)
      await recordSeeded(d, seeder)
    }
    // Once more in reverse: requests end before the services that answer them.
    undo.push(() => drain(http))
    http.off('request', notReady).on('request', app)
    await services.adaptations.announce(port)
    tell(settings, origin)
  } catch (error) {
    await stop()
    throw asStartError(error, settings)
  }

  async function startOwnDatabase() {
    const mariaDb = await startPrivateMariaDb({
      folder: `${settings.dataFolder}/mariadb`,
      onRestart: (outcome) => log.error({ err: outcome instanceof Error ? outcome : undefined }, `MariaDB ended unexpectedly: ${outcome instanceof Error ? 'it cannot be restarted' : outcome}`),
    })
    undo.push(() => mariaDb.stop())
    return mariaDb.address
  }
}

/** proc(5): SigIgn is a mask of the signals that were ignored when the process was started; SIGHUP is the lowest bit. */
function ignoresHangUp(): boolean {
  const mask = /^SigIgn:\s*([0-9a-f]+)$/m.exec(readFileSync('/proc/self/status', 'utf8'))?.[1] ?? '0'
  return (Number.parseInt(mask.slice(-1), 16) & 1) === 1
}

function notReady(_req: unknown, res: import('node:http').ServerResponse): void {
  const problem = { type: 'tag:heftwise.invalid,2026:not-ready', title: 'The service is not ready', status: 503, detail: 'The server is starting. Try again in a few seconds.' }
  res.writeHead(503, { 'Content-Type': 'application/problem+json', 'Retry-After': '2' }).end(JSON.stringify(problem))
}

function listen(http: Server, { port, host }: Settings): Promise<void> {
  return new Promise((done, fail) => {
    http.once('error', (error: NodeJS.ErrnoException) => {
      if (error.code === 'EADDRINUSE') fail(new StartError(`Port ${port} is taken by another program. Stop it, or choose another port, for example: PORT=${port + 1} npm start`, error))
      else if (error.code === 'EACCES') fail(new StartError(`Port ${port} may not be opened by this user. Choose one above 1023, for example: PORT=8080 npm start`, error))
      else if (error.code === 'EADDRNOTAVAIL' || error.code === 'ENOTFOUND') fail(new StartError(`HEFTWISE_HOST is "${host}", which is no address of this machine.`, error))
      else fail(error)
    })
    http.listen(port, host, done)
  })
}

/** Takes no new connections, lets the requests that are running end, then closes what is left. */
function drain(http: Server): Promise<void> {
  return new Promise((done) => {
    if (!http.listening) return done()
    const limit = setTimeout(() => http.closeAllConnections(), drainMs)
    http.close(() => {
      clearTimeout(limit)
      done()
    })
    http.closeIdleConnections()
  })
}

function tell(settings: Settings, origin: string): void {
  const lines = ['', `Heftwise is ready: ${origin}`, `The API's description: ${origin}/docs`]
  const demo = settings.seedDemo ? demoCredentials(settings.dataFolder, origin) : undefined
  if (demo) {
    lines.push('', 'Demo sign-ins (all data is simulated; also in demo-credentials.json in the data folder):')
    for (const { email, password, role } of demo.sign_ins) lines.push(`  ${role.padEnd(14)} ${email.padEnd(32)} ${password}`)
  }
  process.stdout.write(`${lines.join('\n')}\n\n`)
}

function asStartError(error: unknown, { dataFolder }: Settings): unknown {
  if (error instanceof StartError) return error
  const told = `${(error as NodeJS.ErrnoException).code} ${(error as Error).message} ${databaseErrno(error)}`
  return isDiskFull(dataFolder, told) ? diskFull(dataFolder, error) : error
}

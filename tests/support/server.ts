import { createServer } from 'node:http'
import type { Server } from 'node:http'
import type { AddressInfo } from 'node:net'
import { inject } from 'vitest'
import pino from 'pino'
import type { Logger } from 'pino'
import { createApp } from '../../server/app.ts'
import { systemClock } from '../../server/clock.ts'
import type { Clock } from '../../server/clock.ts'
import { openDatabase } from '../../server/database/connection.ts'
import type { Database, DatabaseAddress } from '../../server/database/connection.ts'
import { migrate } from '../../server/database/migrator.ts'
import { createDependencies, startDependencies, stopDependencies } from '../../server/dependencies.ts'
import type { Dependencies } from '../../server/dependencies.ts'
import { createServices, startServices, stopServices } from '../../server/services/index.ts'
import type { Services } from '../../server/services/index.ts'
import type { Caller, Role, Scope } from '../../server/services/permissions.ts'
import type { Settings } from '../../server/settings.ts'
import { keyClient, sessionClient } from './api.ts'
import type { ApiClient, SessionClient } from './api.ts'
import { createTestDatabase } from './database.ts'

export interface TestServer {
  readonly origin: string
  readonly dependencies: Dependencies
  readonly services: Services
  readonly database: Database
  readonly databaseAddress: DatabaseAddress
  /** Errors that were reported as our own mistake; a test that provokes some empties it. `stop` fails when any is left. */
  readonly reportedErrors: string[]
  createTeam(name?: string): Promise<TestTeam>
  /** A client that sends this key, and checks every answer against the contract. Without a key: no credentials. */
  api(secret?: string): ApiClient
  /** Another server process on the same database. */
  another(overrides?: SettingsOverrides): Promise<TestServer>
  stop(): Promise<void>
}

export interface TestTeam {
  readonly id: string
  readonly name: string
  /** Makes a person with this role and signs in. */
  signIn(role: Role): Promise<SessionClient>
  createPerson(role: Role): Promise<{ id: string; email: string; password: string }>
  /** Makes a key and answers a client that sends it. */
  createKey(scopes: readonly Scope[]): Promise<ApiClient & { id: string; secret: string }>
  /** Who services are asked by, without HTTP. */
  caller(role?: Role): Caller
}

export type SettingsOverrides = Partial<Omit<Settings, 'limits' | 'session'>> & { limits?: Partial<Settings['limits']>; session?: Partial<Settings['session']> }

export interface TestServerOptions {
  clock?: Clock
  settings?: SettingsOverrides
}

let made = 0
const unique = () => `${process.pid.toString(36)}-${(++made).toString(36)}`

/** The product on a database of its own, listening on a free port. */
export async function startTestServer({ clock = systemClock, settings }: TestServerOptions = {}): Promise<TestServer> {
  const { address, drop } = await createTestDatabase(inject('mariaDb'))
  const server = await serve(address, clock, settings)
  return { ...server, stop: () => server.stop().finally(drop) }
}

async function serve(address: DatabaseAddress, clock: Clock, overrides: SettingsOverrides = {}): Promise<TestServer> {
  const reportedErrors: string[] = []
  const settings = testSettings(address, overrides)
  const database = openDatabase(address, { models: 4, raw: 4 })
  await migrate(database)
  const dependencies = createDependencies({ settings, database, clock, log: collectingLog(reportedErrors) })
  await startDependencies(dependencies)
  const services = createServices(dependencies)
  const http = createServer(createApp(dependencies, services))
  http.keepAliveTimeout = 75_000
  await new Promise<void>((done) => http.listen(0, '127.0.0.1', done))
  const { port } = http.address() as AddressInfo
  const origin = `http://127.0.0.1:${port}`
  await startServices(services)
  await services.adaptations.announce(port)

  return {
    origin,
    dependencies,
    services,
    database,
    databaseAddress: address,
    reportedErrors,
    createTeam: (name = `team ${unique()}`) => createTeam(origin, services, name),
    api: (secret) => keyClient(origin, secret),
    another: (more) => serve(address, clock, { ...overrides, ...more }),
    async stop() {
      await close(http)
      await stopServices(services)
      await stopDependencies(dependencies)
      await database.close()
      if (reportedErrors.length > 0) throw new Error(`The server reported mistakes of its own:\n${reportedErrors.join('\n')}`)
    },
  }
}

async function createTeam(origin: string, services: Services, name: string): Promise<TestTeam> {
  const team = await services.people.createTeam({ name })
  const createPerson = async (role: Role) => {
    const email = `${role}-${unique()}@example.org`
    const password = `violet ladder under ${unique()} rain`
    const { id } = await services.people.add({ teamId: team.id, email, name: `A ${role}`, role, password })
    return { id, email, password }
  }
  return {
    ...team,
    createPerson,
    signIn: async (role) => sessionClient(origin, await createPerson(role)),
    async createKey(scopes) {
      const { key, secret } = await services.keys.createFor(team.id, { name: `key ${unique()}`, scopes })
      return { ...keyClient(origin, secret), id: key.id, secret }
    },
    caller: (role = 'engineer') => ({ kind: 'person', teamId: team.id, id: '00000000-0000-7000-8000-000000000000', name: `A ${role}`, role, sessionId: '' }),
  }
}

function testSettings(databaseAddress: DatabaseAddress, { limits, session, ...overrides }: SettingsOverrides): Settings {
  return {
    production: false,
    port: 0,
    host: '127.0.0.1',
    origin: null,
    trustedProxies: 0,
    dataFolder: '.test-data',
    databaseAddress,
    peerAddress: null,
    groupCommit: { largestGroup: 256, lanes: 1 },
    secret: 'a secret of the tests, long enough to sign with',
    jobThreads: 1,
    jobNiceness: 0,
    seedDemo: false,
    logLevel: 'silent',
    // bcrypt's least; the real cost is a setting too.
    passwordCost: 4,
    ...overrides,
    session: { idleMs: 3_600_000, absoluteMs: 86_400_000, ...session },
    limits: { requestsPerMinute: 100_000, hotRequestsPerMinute: 10_000_000, signInsPerAddress: 1_000, signInsPerEmail: 10, signInWindowMs: 60_000, ...limits },
  }
}

function collectingLog(reportedErrors: string[]): Logger {
  return pino({ level: 'error' }, { write: (line: string) => void reportedErrors.push(line) })
}

function close(http: Server): Promise<void> {
  return new Promise((done) => {
    http.close(() => done())
    http.closeAllConnections()
  })
}

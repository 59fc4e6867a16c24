import { createServer } from 'node:http'
import type { AddressInfo } from 'node:net'
import { createApp } from '../../server/app.ts'
import { openDatabase } from '../../server/database/connection.ts'
import type { DatabaseAddress } from '../../server/database/connection.ts'
import { migrate } from '../../server/database/migrator.ts'
import { createDependencies, startDependencies, stopDependencies } from '../../server/dependencies.ts'
import { createServices, startServices, stopServices } from '../../server/services/index.ts'
import type { Caller } from '../../server/services/permissions.ts'
import { readSettings } from '../../server/settings.ts'
import type { Settings } from '../../server/settings.ts'
import { serveModel } from '../support/served-model.ts'
import { startMetaTraining } from './meta-training.ts'

/** What the parent says it wants, and what it gets to know. */
export interface ProductOptions {
  readonly database: DatabaseAddress
  readonly groupCommit: Settings['groupCommit']
  readonly adaptations: number
}

export interface ProductReady {
  readonly port: number
  readonly secret: string
  readonly model: string
  readonly fingerprint: string
  readonly adaptations: readonly string[]
}

/** What the parent may ask for afterwards; answered by the same word when it is so. */
export type ProductLoad = 'train' | 'rest'

// The product as server/index.ts runs it, with a team, a key, a model 21-64-64-7 and adaptations of it.

process.once('message', (options: ProductOptions) => void run(options))

async function run({ database: address, groupCommit, adaptations: count }: ProductOptions): Promise<void> {
  const read = readSettings({ ...process.env, PORT: '0' })
  const settings: Settings = { ...read, groupCommit, limits: { ...read.limits, hotRequestsPerMinute: 1e9, requestsPerMinute: 1e9 } }
  const database = openDatabase(address)
  await migrate(database)
  const dependencies = createDependencies({ settings, database })
  await startDependencies(dependencies)
  const services = createServices(dependencies)
  const server = createServer(createApp(dependencies, services))
  server.keepAliveTimeout = 60_000
  await new Promise<void>((done) => server.listen(0, '127.0.0.1', done))
  const { port } = server.address() as AddressInfo
  await startServices(services)
  await services.adaptations.announce(port)

  const team = await services.people.createTeam({ name: `load ${process.pid}` })
  const caller: Caller = { kind: 'person', teamId: team.id, id: team.id, name: 'load', role: 'administrator', sessionId: '' }
  const { secret } = await services.keys.createFor(team.id, { name: 'load', scopes: ['predict', 'adapt'] })
  const served = await serveModel({ dependencies, services }, caller, { joints: 7, hidden: [64, 64], name: 'load', horizon: 1 })
  const adaptations: string[] = []
  for (let k = 0; k < count; k++) {
    const made = await services.adaptations.create(caller, { model: served.model, loss: 'mse', robot: `robot ${k}`, update: { kind: 'sgd', rate: 0.02 } })
    adaptations.push(made.record.id)
  }
  process.send?.({ port, secret, model: served.model, fingerprint: served.fingerprint, adaptations } satisfies ProductReady)

  let endTraining = async (): Promise<void> => undefined
  process.on('message', async (load: ProductLoad) => {
    await endTraining()
    endTraining = load === 'train' ? await startMetaTraining(7, settings.jobNiceness) : async () => undefined
    process.send?.(load)
  })
  process.on('disconnect', () => {
    server.close()
    server.closeAllConnections()
    void stopServices(services).then(() => stopDependencies(dependencies)).then(() => database.close()).then(() => process.exit(0), () => process.exit(1))
  })
}

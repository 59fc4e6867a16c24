import { createServer } from 'node:http'
import type { AddressInfo } from 'node:net'
import { createApp } from '../../server/app.ts'
import { openDatabase } from '../../server/database/connection.ts'
import type { DatabaseAddress } from '../../server/database/connection.ts'
import { createDependencies, startDependencies } from '../../server/dependencies.ts'
import { createServices, startServices } from '../../server/services/index.ts'
import { readSettings } from '../../server/settings.ts'

// A server process that only serves, to be killed by a test.

process.once('message', (address: DatabaseAddress) => void serve(address))
process.once('disconnect', () => process.exit())

async function serve(address: DatabaseAddress): Promise<void> {
  const settings = readSettings({ ...process.env, PORT: '0', HEFTWISE_LOG_LEVEL: 'silent' })
  const dependencies = createDependencies({ settings, database: openDatabase(address) })
  await startDependencies(dependencies)
  const services = createServices(dependencies)
  const server = createServer(createApp(dependencies, services))
  await new Promise<void>((done) => server.listen(0, '127.0.0.1', done))
  const { port } = server.address() as AddressInfo
  await startServices(services)
  await services.adaptations.announce(port)
  process.send?.(port)
}

import { readdir } from 'node:fs/promises'
import type { QueryInterface } from 'sequelize'
import { Umzug } from 'umzug'
import type { UmzugStorage } from 'umzug'
import { StartError } from '../start-error.ts'
import type { Database } from './connection.ts'

interface Migration {
  up(queryInterface: QueryInterface): Promise<void>
}

const folder = new URL('../migrations/', import.meta.url)

export async function migrationNames(): Promise<string[]> {
  const files = await readdir(folder)
  return files.filter((file) => /^\d{4}-[a-z0-9-]+\.ts$/.test(file)).map((file) => file.slice(0, -3)).sort()
}

/**
 * Brings the schema up to this code's. Several processes may start at once: a named lock lets one work while the others wait.
 * @throws {StartError} the database holds migrations that this code does not know
 */
export async function migrate(database: Database): Promise<readonly string[]> {
  const connection = await database.pool.getConnection()
  try {
    await connection.query("SELECT GET_LOCK(CONCAT('heftwise-migrate-', DATABASE()), 300)")
    await connection.query('CREATE TABLE IF NOT EXISTS migrations (name VARCHAR(200) NOT NULL PRIMARY KEY, at DATETIME(3) NOT NULL)')
    const names = await migrationNames()
    await refuseNewer(database, names)
    const umzug = new Umzug<QueryInterface>({
      migrations: names.map((name) => ({ name, up: ({ context }) => load(name).then((step) => step.up(context)) })),
      context: database.sequelize.getQueryInterface(),
      storage: storage(database),
      logger: undefined,
    })
    return (await umzug.up()).map((step) => step.name)
  } finally {
    await connection.query("SELECT RELEASE_LOCK(CONCAT('heftwise-migrate-', DATABASE()))").catch(() => undefined)
    await connection.release()
  }
}

async function load(name: string): Promise<Migration> {
  return (await import(/* @vite-ignore */ new URL(`${name}.ts`, folder).href)) as Migration
}

async function executed(database: Database): Promise<string[]> {
  const rows = await database.pool.query<{ name: string }[]>('SELECT name FROM migrations ORDER BY name')
  return rows.map((row) => row.name)
}

async function refuseNewer(database: Database, known: readonly string[]): Promise<void> {
  const unknown = (await executed(database)).filter((name) => !known.includes(name))
  if (unknown.length > 0) {
    throw new StartError(`The database is newer than this code: it has the step ${unknown.at(-1)}, which this version does not know. Start the newer version, or restore the backup from before its upgrade.`)
  }
}

function storage(database: Database): UmzugStorage {
  return {
    executed: () => executed(database),
    async logMigration({ name }) {
      await database.pool.query('INSERT INTO migrations (name, at) VALUES (?, UTC_TIMESTAMP(3))', [name])
    },
    async unlogMigration() {
      throw new Error('Migrations are append-only.')
    },
  }
}

import { mkdirSync, readdirSync, readFileSync, rmSync, statSync, writeFileSync } from 'node:fs'
import { join, resolve } from 'node:path'
import * as mariadb from 'mariadb'
import type { DatabaseAddress } from '../../server/database/connection.ts'
import { startPrivateMariaDb } from '../../server/database/private-mariadb.ts'

const folder = resolve('.test-data')
const users = join(folder, 'users')
const gate = join(folder, 'gate')

/**
 * One MariaDB for all test runs on this working copy: the first run starts it, the last one to end stops it.
 * @returns the account's address (its `database` is not used by tests), and what to call at the end
 */
export async function joinTestMariaDb(): Promise<{ address: DatabaseAddress; leave: () => Promise<void> }> {
  mkdirSync(users, { recursive: true })
  const me = join(users, String(process.pid))
  return oneAtATime(async () => {
    const isFirst = others().length === 0
    writeFileSync(me, '')
    const server = await startPrivateMariaDb({ folder: join(folder, 'mariadb'), anyDatabase: true, lazyFlush: true })
    if (isFirst) await dropLeftDatabases(server.address)
    const leave = () =>
      oneAtATime(async () => {
        rmSync(me, { force: true })
        if (others().length === 0) await server.stop()
      })
    return { address: server.address, leave }
  })
}

function others(): string[] {
  return readdirSync(users).filter((pid) => {
    if (pid === String(process.pid)) return false
    if (isAlive(Number(pid))) return true
    rmSync(join(users, pid), { force: true })
    return false
  })
}

function isAlive(pid: number): boolean {
  try {
    return readFileSync(`/proc/${pid}/stat`, 'utf8') !== ''
  } catch {
    return false
  }
}

async function oneAtATime<T>(work: () => Promise<T>): Promise<T> {
  for (;;) {
    try {
      mkdirSync(gate)
      break
    } catch {
      const ageMs = Date.now() - (statSync(gate, { throwIfNoEntry: false })?.mtimeMs ?? Date.now())
      if (ageMs > 120_000) rmSync(gate, { recursive: true, force: true })
      await new Promise((done) => setTimeout(done, 100))
    }
  }
  try {
    return await work()
  } finally {
    rmSync(gate, { recursive: true, force: true })
  }
}

async function dropLeftDatabases(address: DatabaseAddress): Promise<void> {
  const connection = await mariadb.createConnection(address)
  const rows = await connection.query<{ name: string }[]>("SELECT schema_name AS name FROM information_schema.schemata WHERE schema_name LIKE 'test\\_%'")
  for (const { name } of rows) await connection.query(`DROP DATABASE \`${name}\``)
  await connection.end()
}

/** An empty database of a test's own. */
export async function createTestDatabase(address: DatabaseAddress): Promise<{ address: DatabaseAddress; drop: () => Promise<void> }> {
  const database = `test_${process.pid}_${Date.now().toString(36)}_${Math.random().toString(36).slice(2, 8)}`
  await run(address, `CREATE DATABASE \`${database}\` CHARACTER SET utf8mb4 COLLATE utf8mb4_unicode_ci`)
  return { address: { ...address, database }, drop: () => run(address, `DROP DATABASE \`${database}\``) }
}

async function run(address: DatabaseAddress, sql: string): Promise<void> {
  const connection = await mariadb.createConnection(address)
  try {
    await connection.query(sql)
  } finally {
    await connection.end()
  }
}

import * as mariadb from 'mariadb'
import { Sequelize, Transaction } from 'sequelize'
import { defineModels } from '../models/index.ts'
import type { Models } from '../models/index.ts'
import { StartError } from '../start-error.ts'

export interface DatabaseAddress {
  readonly host: string
  readonly port: number
  readonly user: string
  readonly password: string
  readonly database: string
}

export interface Database {
  readonly sequelize: Sequelize
  readonly models: Models
  /** The raw connector, for the hot path and for SELECTs that need no model (an untyped sequelize.query of one fails with this connector). DATETIME columns come and go as UTC Date. */
  readonly pool: mariadb.Pool
  /** A managed transaction; run again, from the start, when MariaDB chose it as a deadlock's victim. */
  transaction<T>(work: (transaction: Transaction) => Promise<T>): Promise<T>
  close(): Promise<void>
}

const deadlock = 1213
const attempts = 4

export function openDatabase(address: DatabaseAddress, sizes: { models?: number; raw?: number } = {}): Database {
  const sequelize = new Sequelize(address.database, address.user, address.password, {
    dialect: 'mariadb',
    dialectModule: mariadb,
    host: address.host,
    port: address.port,
    logging: false,
    timezone: '+00:00',
    isolationLevel: Transaction.ISOLATION_LEVELS.READ_COMMITTED,
    pool: { max: sizes.models ?? 8, acquire: 20_000, idle: 60_000 },
    dialectOptions: { connectTimeout: 5_000, allowPublicKeyRetrieval: false, logParam: false },
    define: { timestamps: false, underscored: true, freezeTableName: true },
  })
  const pool = mariadb.createPool({
    ...address,
    connectionLimit: sizes.raw ?? 8,
    timezone: 'Z',
    charset: 'utf8mb4',
    initSql: ['SET NAMES utf8mb4', 'SET SESSION TRANSACTION ISOLATION LEVEL READ COMMITTED'],
    connectTimeout: 5_000,
    // What was to be stored stays out of error messages.
    logParam: false,
    acquireTimeout: 20_000,
    insertIdAsNumber: true,
    bigIntAsNumber: true,
  })
  return {
    sequelize,
    models: defineModels(sequelize),
    pool,
    async transaction(work) {
      for (let attempt = 1; ; attempt++) {
        try {
          return await sequelize.transaction(work)
        } catch (error) {
          if (attempt === attempts || databaseErrno(error) !== deadlock) throw error
        }
      }
    },
    async close() {
      await Promise.all([sequelize.close(), pool.end()])
    },
  }
}

/** @throws {StartError} it cannot be reached, or does not let us in */
export async function requireDatabase(address: DatabaseAddress): Promise<void> {
  try {
    const connection = await mariadb.createConnection({ ...address, connectTimeout: 10_000 })
    await connection.end()
  } catch (error) {
    const reason = ((error as { sqlMessage?: string }).sqlMessage ?? (error as Error).message).split('\n', 1)[0]!.trim()
    throw new StartError(`The database ${address.database} at ${address.host}:${address.port} cannot be used: ${reason}. Check HEFTWISE_DATABASE_URL and that MariaDB runs there.`, error)
  }
}

/** MariaDB's error number, whether the error came from Sequelize or from the connector. */
export function databaseErrno(error: unknown): number | undefined {
  for (let e = error as { errno?: unknown; parent?: unknown; cause?: unknown } | undefined; e; e = (e.parent ?? e.cause) as typeof e) {
    if (typeof e.errno === 'number') return e.errno
  }
  return undefined
}

/** A unique key was violated: which one, or undefined for any other error. */
export function duplicateKey(error: unknown): string | undefined {
  if (databaseErrno(error) !== 1062) return undefined
  for (let e = error as { message?: string; parent?: unknown; cause?: unknown } | undefined; e; e = (e.parent ?? e.cause) as typeof e) {
    const match = /for key '(?:[^']*\.)?([^']+)'/.exec(e.message ?? '')
    if (match) return match[1]
  }
  return ''
}

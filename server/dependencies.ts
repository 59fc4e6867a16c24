import pino from 'pino'
import type { Logger } from 'pino'
import { systemClock } from './clock.ts'
import type { Clock } from './clock.ts'
import type { Database } from './database/connection.ts'
import { createAudit } from './services/audit.ts'
import type { Audit } from './services/audit.ts'
import { createChangeFeed } from './services/change-feed.ts'
import type { ChangeFeed } from './services/change-feed.ts'
import { createKeyDirectory } from './services/key-directory.ts'
import type { KeyDirectory } from './services/key-directory.ts'
import type { Settings } from './settings.ts'

/** What services and routes are built from. Nothing looks these up by itself. */
export interface Dependencies {
  readonly settings: Settings
  readonly database: Database
  readonly clock: Clock
  readonly log: Logger
  readonly changeFeed: ChangeFeed
  /** The active keys, in memory. */
  readonly keys: KeyDirectory
  readonly audit: Audit
}

export function createDependencies({ settings, database, clock = systemClock, log = createLog(settings) }: {
  settings: Settings
  database: Database
  clock?: Clock
  log?: Logger
}): Dependencies {
  const changeFeed = createChangeFeed({ database, log })
  const keys = createKeyDirectory({ database, clock, changeFeed, log })
  return { settings, database, clock, log, changeFeed, keys, audit: createAudit({ database, clock }) }
}

/** Starts listening to other processes and loads what must be in memory before the first request. */
export async function startDependencies({ changeFeed, keys }: Dependencies): Promise<void> {
  await changeFeed.start()
  await keys.start()
}

/** Writes what is still in memory. The database is closed by whoever opened it. */
export async function stopDependencies({ changeFeed, keys }: Dependencies): Promise<void> {
  await changeFeed.stop()
  await keys.stop()
}

export function createLog(settings: Pick<Settings, 'logLevel'>): Logger {
  return pino({ level: settings.logLevel, base: undefined, serializers: { err: errorForLog }, redact: ['*.password', '*.secret', '*.authorization', '*.cookie'] })
}

/** An error as it is logged: without the statement and its parameters, which hold what was to be stored. */
export function errorForLog(error: Error): Record<string, unknown> {
  const { sql, parameters, parent, original, ...told } = pino.stdSerializers.err(error) as unknown as Record<string, unknown>
  const withoutStatement = (text: unknown) => String(text).replaceAll(/\nsql: [^]*?(?=\n {4}at |$)/g, '')
  return { ...told, message: withoutStatement(told.message), stack: withoutStatement(told.stack) }
}

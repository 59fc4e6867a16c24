import { execFile, spawn } from 'node:child_process'
import { randomBytes } from 'node:crypto'
import { existsSync, readFileSync } from 'node:fs'
import { chmod, mkdir, open, readFile, rename, rm, stat, writeFile } from 'node:fs/promises'
import { createServer } from 'node:net'
import { tmpdir, userInfo } from 'node:os'
import { join, resolve } from 'node:path'
import { promisify } from 'node:util'
import * as mariadb from 'mariadb'
import { diskFull, isDiskFull, requireDiskSpace } from '../disk-space.ts'
import { StartError } from '../start-error.ts'
import type { DatabaseAddress } from './connection.ts'

const run = promisify(execFile)
const wait = (ms: number) => new Promise((done) => setTimeout(done, ms))

export interface PrivateMariaDb {
  readonly address: DatabaseAddress
  /** Changes when it was restarted. */
  readonly pid: number
  /** True when it was found running, left by a process that was killed. */
  readonly adopted: boolean
  stop(): Promise<void>
}

interface Credentials {
  user: string
  password: string
  database: string
  port: number
}

export interface PrivateMariaDbOptions {
  /** Holds the data, the credentials and the error log. */
  folder: string
  /** Only for tests: may the account make databases of its own? */
  anyDatabase?: boolean
  /** Only for tests: flush the log once a second instead of at every commit. */
  lazyFlush?: boolean
  /** Start it again, on the same port, when it ends without having been asked to; told each time. */
  onRestart?: (outcome: 'restarting' | 'restarted' | StartError) => void
}

/**
 * Starts a MariaDB of our own on loopback, with its own data folder, account and generated password, or takes over the one that
 * an earlier process, killed before it could stop it, left running on the same folder.
 */
export async function startPrivateMariaDb(options: PrivateMariaDbOptions): Promise<PrivateMariaDb> {
  const folder = resolve(options.folder)
  const program = findProgram('mariadbd')
  if (!program) {
    throw new StartError('MariaDB is not installed. Run: sudo apt-get install --no-install-recommends mariadb-server-core mariadb-client-core')
  }
  const owner = await accountFor(folder)
  await mkdir(folder, { recursive: true, mode: 0o700 })
  requireDiskSpace(folder, !existsSync(join(dataOf(folder), 'mysql')))
  await install(folder, owner)
  const credentials = await readCredentials(folder)

  const left = await runningPid(folder)
  if (left !== undefined) {
    if (await answers(credentials, 3_000)) return handle(left, true)
    await stopProcess(left)
  }
  const port = await freePort(credentials.port)
  if (port !== credentials.port) await writeCredentials(folder, Object.assign(credentials, { port }))
  return handle(await launch(program, folder, owner, credentials, options), false)

  function handle(firstPid: number, adopted: boolean): PrivateMariaDb {
    let pid = firstPid
    let restarting: Promise<void> | undefined
    const { onRestart } = options
    const watch = onRestart && setInterval(() => {
      if (restarting === undefined && !isRunning(pid)) restarting = restart(onRestart).finally(() => (restarting = undefined))
    }, 250)
    watch?.unref()
    const restart = async (tell: NonNullable<typeof onRestart>) => {
      tell('restarting')
      try {
        pid = await launch(program!, folder, owner, credentials, options)
        tell('restarted')
      } catch (error) {
        tell(error as StartError)
        await wait(2_000)
      }
    }
    return {
      address: { host: '127.0.0.1', ...credentials },
      get pid() {
        return pid
      },
      adopted,
      async stop() {
        clearInterval(watch)
        await restarting
        await stopProcess(pid)
        await rm(pidFile(folder), { force: true })
      },
    }
  }
}

const dataOf = (folder: string) => join(folder, 'data')
const pidFile = (folder: string) => join(folder, 'mariadb.pid')

function findProgram(name: string): string | undefined {
  return ['/usr/sbin', '/usr/bin', '/usr/local/sbin', '/usr/local/bin'].map((place) => join(place, name)).find(existsSync)
}

/** mariadbd refuses to run as root unless told to; as root we run it as whoever owns the folder. */
async function accountFor(folder: string): Promise<string | undefined> {
  if (process.getuid?.() !== 0) return undefined
  let place = folder
  while (!existsSync(place)) place = resolve(place, '..')
  const { uid } = await stat(place)
  if (uid === 0) return 'root'
  return run('id', ['-un', String(uid)]).then(({ stdout }) => stdout.trim(), () => 'root')
}

async function install(folder: string, owner: string | undefined): Promise<void> {
  const data = dataOf(folder)
  if (existsSync(join(data, 'mysql'))) return
  const program = findProgram('mariadb-install-db')
  if (!program) throw new StartError('mariadb-install-db is missing. Run: sudo apt-get install --no-install-recommends mariadb-server-core')
  // Made aside and renamed, so that a first start that was broken off leaves no half-made data folder.
  const draft = join(folder, 'data-draft')
  await rm(draft, { recursive: true, force: true })
  try {
    await run(program, [
      '--no-defaults', `--datadir=${draft}`, `--user=${owner ?? userInfo().username}`,
      // --force: no matter whether the machine can look up its own name.
      '--force', '--auth-root-authentication-method=normal', '--skip-test-db', '--innodb-log-file-size=48M',
    ], { maxBuffer: 1 << 24 })
  } catch (error) {
    const told = `${(error as { stdout?: string }).stdout ?? ''}${(error as { stderr?: string }).stderr ?? ''}`
    if (isDiskFull(folder, told)) throw diskFull(folder, error)
    throw new StartError(`MariaDB could not lay out its data folder in ${folder}: ${lastLine(told) || (error as Error).message}`, error)
  }
  await rm(data, { recursive: true, force: true })
  await rename(draft, data)
}

async function readCredentials(folder: string): Promise<Credentials> {
  const file = join(folder, 'credentials.json')
  if (existsSync(file)) return JSON.parse(await readFile(file, 'utf8')) as Credentials
  const credentials = { user: 'heftwise', password: randomBytes(24).toString('base64url'), database: 'heftwise', port: 0 }
  await writeCredentials(folder, credentials)
  return credentials
}

async function writeCredentials(folder: string, credentials: Credentials): Promise<void> {
  const file = join(folder, 'credentials.json')
  await writeFile(`${file}.new`, JSON.stringify(credentials), { mode: 0o600 })
  await chmod(`${file}.new`, 0o600)
  await rename(`${file}.new`, file)
}

/** The process that holds our data folder, whichever of our processes started it. */
async function runningPid(folder: string): Promise<number | undefined> {
  const text = await readFile(pidFile(folder), 'utf8').catch(() => '')
  const pid = Number.parseInt(text, 10)
  if (!(pid > 0)) return undefined
  const command = await readFile(`/proc/${pid}/cmdline`, 'utf8').catch(() => '')
  return command.includes(`--datadir=${dataOf(folder)}\0`) ? pid : undefined
}

async function answers(credentials: Credentials, timeoutMs: number): Promise<boolean> {
  const connection = await mariadb
    .createConnection({ host: '127.0.0.1', ...credentials, connectTimeout: timeoutMs })
    .catch(() => undefined)
  await connection?.end()
  return connection !== undefined
}

async function freePort(wanted: number): Promise<number> {
  const attempt = (port: number) =>
    new Promise<number | undefined>((done) => {
      const server = createServer()
      server.once('error', () => done(undefined))
      server.listen(port, '127.0.0.1', () => {
        const chosen = (server.address() as { port: number }).port
        server.close(() => done(chosen))
      })
    })
  const port = (wanted > 0 ? await attempt(wanted) : undefined) ?? (await attempt(0))
  if (port === undefined) throw new StartError('No port on 127.0.0.1 is free for MariaDB.')
  return port
}

async function launch(program: string, folder: string, owner: string | undefined, credentials: Credentials, options: PrivateMariaDbOptions): Promise<number> {
  const { user, password, database, port } = credentials
  const scope = options.anyDatabase ? '*.*' : `\`${database}\`.*`
  const setup = join(folder, 'setup.sql')
  // Run at every start, so an interrupted first start heals itself. Statements of an init file end at the line's end.
  await writeFile(setup, [
    `CREATE DATABASE IF NOT EXISTS \`${database}\` CHARACTER SET utf8mb4 COLLATE utf8mb4_unicode_ci;`,
    ...['127.0.0.1', 'localhost'].flatMap((host) => [
      `CREATE USER IF NOT EXISTS '${user}'@'${host}' IDENTIFIED BY '${password}';`,
      `ALTER USER '${user}'@'${host}' IDENTIFIED BY '${password}';`,
      `GRANT ALL PRIVILEGES ON ${scope} TO '${user}'@'${host}';`,
      `ALTER USER IF EXISTS 'root'@'${host}' IDENTIFIED BY '${password}';`,
      `DROP USER IF EXISTS ''@'${host}';`,
    ]),
    '',
  ].join('\n'), { mode: 0o600 })
  if (owner && owner !== 'root') await run('chown', [owner, setup])

  const log = await open(join(folder, 'mariadb.log'), 'a', 0o600)
  const child = spawn(program, [
    '--no-defaults',
    `--datadir=${dataOf(folder)}`,
    ...(owner ? [`--user=${owner}`] : []),
    '--bind-address=127.0.0.1', `--port=${port}`, `--socket=${socketPath(folder)}`, `--pid-file=${pidFile(folder)}`,
    '--skip-name-resolve', '--skip-log-bin', '--local-infile=0', '--symbolic-links=0',
    '--character-set-server=utf8mb4', '--collation-server=utf8mb4_unicode_ci', '--default-time-zone=+00:00',
    '--sql-mode=STRICT_ALL_TABLES,NO_ZERO_DATE,NO_ZERO_IN_DATE,ERROR_FOR_DIVISION_BY_ZERO,NO_ENGINE_SUBSTITUTION',
    '--max-connections=200', '--max-allowed-packet=64M', '--innodb-buffer-pool-size=128M', '--innodb-log-file-size=48M',
    `--innodb-flush-log-at-trx-commit=${options.lazyFlush ? 2 : 1}`, '--innodb-lock-wait-timeout=10', '--performance-schema=OFF',
    `--init-file=${setup}`,
  ], {
    // A process group of its own: Ctrl-C reaches us only, and MariaDB stops after the last request was answered.
    detached: true,
    stdio: ['ignore', log.fd, log.fd],
  })
  child.unref()
  await log.close()

  let ended: string | undefined
  child.once('error', (error) => (ended = error.message))
  child.once('exit', (code, signal) => (ended = `it ended with ${signal ?? code}`))
  const deadline = Date.now() + 90_000
  while (ended === undefined && Date.now() < deadline) {
    if (await answers(credentials, 2_000)) {
      await rm(setup, { force: true })
      return child.pid as number
    }
    await wait(50)
  }
  const tail = (await readFile(join(folder, 'mariadb.log'), 'utf8').catch(() => '')).slice(-6_000)
  if (isDiskFull(folder, tail)) throw diskFull(folder)
  const line = lastLine(tail.split('\n').filter((text) => text.includes('[ERROR]')).join('\n'))
  throw new StartError(`MariaDB did not come up (${ended ?? 'no answer within 90 s'}). ${line || 'It wrote no reason.'} Its log: ${join(folder, 'mariadb.log')}`)
}

/** Unix sockets take at most 107 bytes; a deep data folder gets its socket in the system's temporary folder. */
function socketPath(folder: string): string {
  const path = join(folder, 'mariadb.sock')
  if (Buffer.byteLength(path) <= 100) return path
  return join(tmpdir(), `heftwise-${randomBytes(6).toString('hex')}.sock`)
}

async function stopProcess(pid: number): Promise<void> {
  for (const [signal, patienceMs] of [['SIGTERM', 60_000], ['SIGKILL', 10_000]] as const) {
    if (!isRunning(pid)) return
    try {
      process.kill(pid, signal)
    } catch {
      return
    }
    const deadline = Date.now() + patienceMs
    while (Date.now() < deadline) {
      if (!isRunning(pid)) return
      await wait(50)
    }
  }
}

/** A process that has ended but whose parent has not asked for its exit code does not count. */
function isRunning(pid: number): boolean {
  try {
    return !/\) Z /.test(readFileSync(`/proc/${pid}/stat`, 'utf8'))
  } catch {
    return false
  }
}

function lastLine(text: string): string {
  return text.trim().split('\n').at(-1)?.trim() ?? ''
}

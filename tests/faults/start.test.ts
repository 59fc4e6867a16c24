import { spawn } from 'node:child_process'
import type { ChildProcess } from 'node:child_process'
import { existsSync, mkdtempSync, readFileSync, rmSync, statSync, writeFileSync } from 'node:fs'
import { createServer } from 'node:net'
import type { AddressInfo } from 'node:net'
import { tmpdir } from 'node:os'
import { join } from 'node:path'
import * as mariadb from 'mariadb'
import { afterAll, describe, expect, test } from 'vitest'

/** The process itself: started, killed and stopped as an operator would, on data folders of its own. */
const folders: string[] = []
const running = new Set<ChildProcess>()
afterAll(async () => {
  // Only where a test failed is anything left.
  const ends = [...running].map((child) => new Promise((done) => child.once('exit', done)))
  for (const child of running) child.kill('SIGTERM')
  await Promise.all(ends)
  for (const folder of folders) rmSync(folder, { recursive: true, force: true })
})

const newFolder = () => {
  const folder = mkdtempSync(join(tmpdir(), 'heftwise-start-'))
  folders.push(folder)
  return folder
}

interface Started {
  child: ChildProcess
  origin: string
  output: () => string
  exit: Promise<number | string | null>
}

/** Runs the server without the demo's arm and models, which these tests do not need. */
function start(folder: string, env: Record<string, string> = {}): Started {
  const child = spawn(process.execPath, ['--import', 'tsx', '-e', "import('./server/index.ts').then(({ run }) => run()).catch((error) => { console.error(error.name === 'StartError' ? error.message : error); process.exit(1) })"], {
    env: { PATH: process.env.PATH, HOME: process.env.HOME, PORT: '0', HEFTWISE_DATA_DIR: folder, HEFTWISE_DEMO: '0', ...env },
    stdio: ['ignore', 'pipe', 'pipe'],
  })
  running.add(child)
  let output = ''
  child.stdout!.on('data', (part: Buffer) => (output += part.toString()))
  child.stderr!.on('data', (part: Buffer) => (output += part.toString()))
  const exit = new Promise<number | string | null>((done) =>
    child.once('exit', (code, signal) => {
      running.delete(child)
      done(code ?? signal)
    }))
  return { child, exit, output: () => output, get origin() { return /ready: (\S+)/.exec(output)?.[1] ?? '' } }
}

async function ready(server: Started): Promise<void> {
  const over = server.exit.then((code) => `ended with ${code}`)
  while (server.origin === '') {
    const state = await Promise.race([over, new Promise((done) => setTimeout(done, 50))])
    if (state !== undefined) throw new Error(`${String(state)}: ${server.output()}`)
  }
}

const mariaDbPid = (folder: string) => Number(readFileSync(join(folder, 'mariadb', 'mariadb.pid'), 'utf8'))
const isAlive = (pid: number) => existsSync(`/proc/${pid}`) && !/\) Z /.test(readFileSync(`/proc/${pid}/stat`, 'utf8'))
const healthy = async (server: Started) => (await fetch(`${server.origin}/readyz`)).status === 200

async function query(folder: string, sql: string): Promise<unknown[]> {
  const credentials = JSON.parse(readFileSync(join(folder, 'mariadb', 'credentials.json'), 'utf8')) as mariadb.ConnectionConfig
  const connection = await mariadb.createConnection({ ...credentials, host: '127.0.0.1' })
  try {
    return await connection.query<unknown[]>(sql)
  } finally {
    await connection.end()
  }
}

describe('starting and stopping', () => {
  const folder = newFolder()

  test('a first start lays out a private MariaDB; SIGTERM stops both', { timeout: 120_000 }, async () => {
    const server = start(folder)
    await ready(server)
    const pid = mariaDbPid(folder)

    expect(await healthy(server)).toBe(true)
    expect(statSync(join(folder, 'mariadb', 'credentials.json')).mode & 0o777).toBe(0o600)
    expect(statSync(join(folder, 'secret')).mode & 0o777).toBe(0o600)
    expect(readFileSync(`/proc/${pid}/cmdline`, 'utf8')).toContain('--bind-address=127.0.0.1')

    server.child.kill('SIGTERM')
    expect(await server.exit).toBe(0)
    expect(isAlive(pid)).toBe(false)
    expect(existsSync(join(folder, 'server.pid'))).toBe(false)
  })

  test('after kill -9 the next start takes over the MariaDB that was left, and stops it in the end', { timeout: 120_000 }, async () => {
    const killed = start(folder)
    await ready(killed)
    const pid = mariaDbPid(folder)
    killed.child.kill('SIGKILL')
    await killed.exit
    expect(isAlive(pid)).toBe(true)

    const next = start(folder)
    await ready(next)
    expect(mariaDbPid(folder)).toBe(pid)
    expect(await healthy(next)).toBe(true)

    next.child.kill('SIGINT')
    expect(await next.exit).toBe(0)
    expect(isAlive(pid)).toBe(false)
  })

  test('after kill -9 of MariaDB it is started again, on the same port, while the server goes on', { timeout: 120_000 }, async () => {
    const server = start(folder)
    await ready(server)
    const pid = mariaDbPid(folder)

    process.kill(pid, 'SIGKILL')
    const deadline = Date.now() + 60_000
    while (mariaDbPidOrZero() === pid || !(await healthy(server))) {
      if (Date.now() > deadline) throw new Error(`not healthy again: ${server.output()}`)
      await new Promise((done) => setTimeout(done, 100))
    }

    expect(isAlive(mariaDbPid(folder))).toBe(true)
    server.child.kill('SIGTERM')
    expect(await server.exit).toBe(0)
  })

  test('a request that is running when the stop comes is answered', { timeout: 120_000 }, async () => {
    const server = start(folder)
    await ready(server)

    const slow = fetch(`${server.origin}/v1/session`, { method: 'POST', headers: { 'content-type': 'application/json' }, body: JSON.stringify({ email: 'nobody@example.org', password: 'bcrypt takes its time' }) })
    await new Promise((done) => setTimeout(done, 60))
    server.child.kill('SIGTERM')

    expect((await slow).status).toBe(401)
    expect(await server.exit).toBe(0)
  })

  test('a Ctrl-C that npm passes on a second time does not cut the stop short', { timeout: 120_000 }, async () => {
    const server = start(folder)
    await ready(server)
    const pid = mariaDbPid(folder)

    server.child.kill('SIGINT')
    server.child.kill('SIGINT')

    expect(await server.exit).toBe(0)
    expect(isAlive(pid)).toBe(false)
  })

  function mariaDbPidOrZero(): number {
    try {
      return mariaDbPid(folder)
    } catch {
      return 0
    }
  }
})

describe('what stands in the way is told in one sentence', () => {
  async function refused(server: Started): Promise<string> {
    expect(await server.exit).toBe(1)
    expect(server.output()).not.toMatch(/\n\s+at /)
    return server.output().trim()
  }

  test('a port that is taken', { timeout: 60_000 }, async () => {
    const other = createServer().listen(0, '127.0.0.1')
    await new Promise((done) => other.once('listening', done))
    const { port } = other.address() as AddressInfo

    expect(await refused(start(newFolder(), { PORT: String(port) }))).toMatch(new RegExp(`^Port ${port} is taken by another program\\. .*PORT=${port + 1} npm start$`))
    other.close()
  })

  test('a data folder that another server uses', { timeout: 120_000 }, async () => {
    const folder = newFolder()
    const first = start(folder)
    await ready(first)

    expect(await refused(start(folder))).toMatch(/^Heftwise runs on the data folder .* already \(process \d+\)\./)
    expect(await healthy(first)).toBe(true)

    first.child.kill('SIGTERM')
    await first.exit
  })

  test('a database that is newer than the code', { timeout: 120_000 }, async () => {
    const folder = newFolder()
    const first = start(folder)
    await ready(first)
    await query(folder, "INSERT INTO migrations (name, at) VALUES ('9999-from-the-future', UTC_TIMESTAMP(3))")
    first.child.kill('SIGTERM')
    await first.exit

    expect(await refused(start(folder))).toMatch(/^The database is newer than this code: it has the step 9999-from-the-future/)
    expect(existsSync(join(folder, 'mariadb', 'mariadb.pid')), 'what was started is stopped again').toBe(false)
  })

  test.each<[string, Record<string, string>, RegExp]>([
    ['a port that is none', { PORT: '80808' }, /^PORT is "80808"; it must be a whole number from 0 to 65535\.$/],
    ['production without an https origin', { NODE_ENV: 'production', HEFTWISE_ORIGIN: 'http://plain.example.org' }, /^Production needs HEFTWISE_ORIGIN with the https address/],
    ['production with the demo', { NODE_ENV: 'production', HEFTWISE_DEMO: '1' }, /^HEFTWISE_DEMO asks for demo data .*, which production refuses/],
    ['production with a short secret', { NODE_ENV: 'production', HEFTWISE_ORIGIN: 'https://heftwise.example.org', HEFTWISE_SECRET: 'short' }, /^HEFTWISE_SECRET has 5 characters; production needs at least 32/],
    ['a database address that cannot be read', { HEFTWISE_DATABASE_URL: 'localhost:3306' }, /^HEFTWISE_DATABASE_URL cannot be read; it must look like mariadb:/],
    ['a database that is not there', { HEFTWISE_DATABASE_URL: 'mariadb://a:b@127.0.0.1:1/x' }, /^The database x at 127\.0\.0\.1:1 cannot be used: .*ECONNREFUSED/],
  ])('%s', { timeout: 60_000 }, async (_case, env, sentence) => {
    expect(await refused(start(newFolder(), env))).toMatch(sentence)
  })

  test('a data folder that is a file', { timeout: 60_000 }, async () => {
    const file = join(newFolder(), 'file')
    writeFileSync(file, '')

    expect(await refused(start(file))).toMatch(/^The data folder .* cannot be written \(.*\)\. Mend its permissions, or name another in HEFTWISE_DATA_DIR\.$/)
  })
})

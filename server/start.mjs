// Behind `npm start` and `npm test`: installs what is missing, generates and builds what is out of date, then runs the server or
// the tests. Built-ins only, since node_modules may not exist yet.
import { spawnSync } from 'node:child_process'
import { createHash } from 'node:crypto'
import { existsSync, mkdirSync, readdirSync, readFileSync, rmSync, statfsSync, statSync, writeFileSync } from 'node:fs'
import { join, relative } from 'node:path'
import { fileURLToPath } from 'node:url'

const root = fileURLToPath(new URL('..', import.meta.url))
const at = (...parts) => join(root, ...parts)
const isTest = process.argv.includes('--test')

class CannotStart extends Error {}

try {
  process.chdir(root)
  requireNode()
  installPackages()
  if (!process.env.HEFTWISE_DATABASE_URL || isTest) {
    installProgram('MariaDB', ['mariadbd', 'mariadb-install-db', 'my_print_defaults'], ['mariadb-server-core', 'mariadb-client-core'])
  }
  if (isTest) installProgram('Chromium, which the tests drive,', ['chromium'], ['chromium'])
  generate('contract types', ['openapi.yaml'], ['shared/contract/openapi.generated.ts'], 'generate:contract')
  generate('kernels', ['shared/dynamics/kernels/build.mjs', 'shared/dynamics/kernels/source'], ['shared/dynamics/kernels/kernels.generated.ts'], 'generate:kernels')
  generate('console', ['console', 'sdk', 'shared', 'fonts', 'vite.config.ts', 'package-lock.json'], ['console/dist/index.html'], 'build')
  if (isTest) runTests()
  else await runServer()
} catch (error) {
  const isTold = error instanceof CannotStart || error?.name === 'StartError'
  console.error(isTold ? `\nHeftwise cannot start. ${error.message}\n` : error)
  process.exit(1)
}

function requireNode() {
  const [major, minor] = process.versions.node.split('.').map(Number)
  if (major < 20 || (major === 20 && minor < 19)) {
    throw new CannotStart(`It needs Node.js 20.19 or newer; this is ${process.versions.node}. Install a newer one, for example from https://nodejs.org.`)
  }
}

function installPackages() {
  if (hasPackages()) return
  say('Installing npm packages …')
  run('npm', ['ci', '--no-audit', '--no-fund', '--include=dev'], 'The npm packages could not be installed. Check the network, then run: npm ci --include=dev')
}

/** Is what package-lock.json lists there, in the same versions? npm keeps its own record of what it installed. */
function hasPackages() {
  const record = at('node_modules', '.package-lock.json')
  if (!existsSync(record)) return false
  const wanted = JSON.parse(readFileSync(at('package-lock.json'), 'utf8')).packages
  const installed = JSON.parse(readFileSync(record, 'utf8')).packages
  return Object.entries(wanted).every(([path, { version, optional, link }]) => path === '' || optional || link || installed[path]?.version === version)
}

function installProgram(name, programs, packages) {
  const isThere = () => programs.every((program) => ['/usr/sbin', '/usr/bin', '/usr/local/sbin', '/usr/local/bin'].some((place) => existsSync(join(place, program))))
  if (isThere()) return
  const commands = ['apt-get update', `apt-get install -y --no-install-recommends ${packages.join(' ')}`]
  const byHand = `Run: ${commands.map((command) => `sudo ${command}`).join(' && ')}`
  if (!existsSync('/usr/bin/apt-get')) throw new CannotStart(`${name} is missing, and this is no Debian where it could be installed by itself. Install ${packages.join(' and ')} with your system's package manager.`)
  const isRoot = process.getuid() === 0
  if (!isRoot && spawnSync('sudo', ['-n', 'true'], { stdio: 'ignore' }).status !== 0) {
    throw new CannotStart(`${name} is missing, and this user may not install it. ${byHand}`)
  }
  say(`Installing ${packages.join(', ')} …`)
  for (const command of commands) {
    const words = [...(isRoot ? [] : ['sudo', '-n']), 'env', 'DEBIAN_FRONTEND=noninteractive', ...command.split(' ')]
    const { status } = spawnSync(words[0], words.slice(1), { stdio: ['ignore', 'ignore', 'inherit'] })
    if (status !== 0) throw noSpace() ?? new CannotStart(`${name} could not be installed ("${command}" failed, see above). ${byHand}`)
  }
  if (!isThere()) throw new CannotStart(`${packages.join(' and ')} were installed, but ${programs.join(', ')} were not found afterwards.`)
}

/** Runs an npm script when its sources have changed since it ran last, or its output is missing. */
function generate(name, sources, outputs, script) {
  if (!existsSync(at(sources[0]))) return
  const stamp = at('node_modules', '.cache', 'heftwise', script.replace(':', '-'))
  const fingerprint = fingerprintOf(sources)
  const isCurrent = outputs.every((output) => existsSync(at(output))) && existsSync(stamp) && readFileSync(stamp, 'utf8') === fingerprint
  if (isCurrent) return
  say(`Making the ${name} …`)
  run('npm', ['run', '--silent', script], `The ${name} could not be made: "npm run ${script}" failed, see above.`)
  mkdirSync(join(stamp, '..'), { recursive: true })
  writeFileSync(stamp, fingerprint)
}

function fingerprintOf(sources) {
  const hash = createHash('sha256').update(process.versions.node)
  const add = (path) => {
    if (!existsSync(path)) return
    if (statSync(path).isDirectory()) {
      for (const name of readdirSync(path).sort()) if (!['dist', 'node_modules'].includes(name)) add(join(path, name))
    } else hash.update(relative(root, path)).update('\0').update(readFileSync(path)).update('\0')
  }
  for (const source of sources) add(at(source))
  return hash.digest('hex')
}

function run(program, words, sentence) {
  const { status, signal } = spawnSync(program, words, { stdio: ['ignore', 'inherit', 'inherit'] })
  if (signal) process.exit(1)
  if (status !== 0) throw noSpace() ?? new CannotStart(sentence)
}

function noSpace() {
  const { bavail, bsize } = statfsSync(root)
  return bavail * bsize < 100e6 ? new CannotStart(`The disk that holds ${root} is full. Free some space (at least 1 GB) and start again.`) : undefined
}

function say(text) {
  console.log(text)
}

async function runServer() {
  const { register } = await import('tsx/esm/api')
  register()
  const server = await import('./index.ts')
  await server.run()
}

/** Type check, then every test; the last line counts them, the exit code is 0 only when nothing failed. */
function runTests() {
  const report = at('node_modules', '.cache', 'heftwise', 'tests.json')
  mkdirSync(join(report, '..'), { recursive: true })
  rmSync(report, { force: true })
  say('Checking types …')
  const types = spawnSync(process.execPath, [at('node_modules', 'typescript', 'bin', 'tsc'), '--noEmit'], { stdio: 'inherit' })
  const vitest = spawnSync(
    process.execPath,
    [at('node_modules', 'vitest', 'vitest.mjs'), 'run', '--reporter=default', '--reporter=json', `--outputFile.json=${report}`],
    { stdio: 'inherit', env: { ...process.env, NODE_ENV: 'test' } },
  )
  const counts = existsSync(report) ? JSON.parse(readFileSync(report, 'utf8')) : { numPassedTests: 0, numFailedTests: 0 }
  // A test file that cannot even be read counts once, and so do errors outside of tests.
  const brokenFiles = (counts.testResults ?? []).filter(({ status, assertionResults }) => status === 'failed' && !assertionResults.some((result) => result.status === 'failed')).length
  let failed = counts.numFailedTests + brokenFiles
  if (vitest.status !== 0 && failed === 0) failed = 1
  const passed = counts.numPassedTests + (types.status === 0 ? 1 : 0)
  if (types.status !== 0) failed += 1
  console.log(`${passed} passed, ${failed} failed`)
  process.exit(failed === 0 ? 0 : 1)
}

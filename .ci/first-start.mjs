// Clones this commit, starts it as a new user would, and checks that it serves; then that it stops, starts again quickly, and leaves
// nothing running.
import { execFileSync, spawn } from 'node:child_process'
import { existsSync, mkdirSync, mkdtempSync, readdirSync, readFileSync, rmSync, statSync, writeFileSync } from 'node:fs'
import { createServer } from 'node:net'
import { tmpdir } from 'node:os'
import { join } from 'node:path'
import { fileURLToPath } from 'node:url'

const root = fileURLToPath(new URL('..', import.meta.url))
const folder = mkdtempSync(join(tmpdir(), 'heftwise-first-start-'))
const clone = join(folder, 'clone')
const data = join(folder, 'data')
const counts = { passed: 0, failed: 0 }

async function check(sentence, work) {
  const begun = performance.now()
  try {
    await work()
    counts.passed++
    console.log(`ok      ${sentence} (${((performance.now() - begun) / 1000).toFixed(1)} s)`)
  } catch (error) {
    counts.failed++
    console.log(`not ok  ${sentence}: ${error.message}`)
  }
}

function require(condition, sentence) {
  if (!condition) throw new Error(sentence)
}

const freePort = () => new Promise((done) => {
  const server = createServer().listen(0, '127.0.0.1', () => {
    const { port } = server.address()
    server.close(() => done(port))
  })
})

/** Runs `npm start` until the server answers, or fails with what it printed. */
async function start(port, patienceMs) {
  const child = spawn('npm', ['start'], { cwd: clone, env: { ...process.env, PORT: String(port), HEFTWISE_DATA_DIR: data }, stdio: ['ignore', 'pipe', 'pipe'] })
  let output = ''
  child.stdout.on('data', (part) => (output += part))
  child.stderr.on('data', (part) => (output += part))
  const ended = new Promise((done) => child.once('exit', (code, signal) => done(code ?? signal)))
  let isOver = false
  void ended.then(() => (isOver = true))
  const deadline = Date.now() + patienceMs
  while (Date.now() < deadline && !isOver) {
    const answer = await fetch(`http://127.0.0.1:${port}/healthz`).catch(() => undefined)
    if (answer?.status === 200) return { child, ended, output: () => output }
    await new Promise((done) => setTimeout(done, 100))
  }
  child.kill('SIGTERM')
  throw new Error(`no healthy answer within ${patienceMs / 1000} s; it printed:\n${output.slice(-3000)}`)
}

async function stop({ child, ended }) {
  child.kill('SIGTERM')
  const code = await Promise.race([ended, new Promise((done) => setTimeout(() => done('still running after 30 s'), 30_000))])
  require(code === 0 || code === 'SIGTERM', `it ended with ${code}`)
}

/** Processes that still name the data folder in their command line. */
function leftovers() {
  return readdirSync('/proc').filter((pid) => /^\d+$/.test(pid) && Number(pid) !== process.pid).filter((pid) => {
    try {
      return readFileSync(`/proc/${pid}/cmdline`, 'utf8').includes(data)
    } catch {
      return false
    }
  })
}

const port = await freePort()
const origin = `http://127.0.0.1:${port}`
let server
let demo

await check('a clean clone is made', () => execFileSync('git', ['clone', '--quiet', '--no-hardlinks', root, clone]))

await check('npm start comes up on it', async () => {
  server = await start(port, 10 * 60_000)
})

await check('the demo credentials are there, for their owner only', () => {
  const file = join(data, 'demo-credentials.json')
  require(existsSync(file), 'demo-credentials.json is missing')
  require((statSync(file).mode & 0o777) === 0o600, `its mode is ${(statSync(file).mode & 0o777).toString(8)}`)
  demo = JSON.parse(readFileSync(file, 'utf8'))
  require(demo.origin === origin && demo.sign_ins.length >= 4 && demo.api_key.length >= 43, JSON.stringify(Object.keys(demo)))
})

await check('a person signs in, and out with cookie and CSRF token', async () => {
  const [{ email, password }] = demo.sign_ins
  const signedIn = await fetch(`${origin}/v1/session`, { method: 'POST', headers: { 'content-type': 'application/json' }, body: JSON.stringify({ email, password }) })
  require(signedIn.status === 201, `sign-in answered ${signedIn.status}`)
  const cookie = signedIn.headers.getSetCookie()[0].split(';')[0]
  const { csrf_token: token } = await (await fetch(`${origin}/v1/session`, { headers: { cookie } })).json()
  const without = await fetch(`${origin}/v1/session`, { method: 'DELETE', headers: { cookie } })
  require(without.status === 403, `without the token it answered ${without.status}`)
  const signedOut = await fetch(`${origin}/v1/session`, { method: 'DELETE', headers: { cookie, 'x-csrf-token': token } })
  require(signedOut.status === 204, `sign-out answered ${signedOut.status}`)
})

await check('the demo key predicts with a live model', async () => {
  const authorization = `Bearer ${demo.api_key}`
  const { items: models } = await (await fetch(`${origin}/v1/models`, { headers: { authorization } })).json()
  const model = models.find(({ live_version: live }) => live !== null)
  require(model, 'no model is live')
  const arm = await (await fetch(`${origin}/v1/arms/${model.arm}`, { headers: { authorization } })).json()
  const row = arm.joints.map(() => 0.1)
  const answer = await fetch(`${origin}/v1/models/${model.name}/predict`, {
    method: 'POST',
    headers: { authorization, 'content-type': 'application/json' },
    body: JSON.stringify({ joint_names: arm.joints.map(({ name }) => name), position: [row], velocity: [row], acceleration: [row] }),
  })
  const body = await answer.json()
  require(answer.status === 200 && body.torque[0].every(Number.isFinite), `it answered ${answer.status}: ${JSON.stringify(body).slice(0, 300)}`)
})

await check('the console and the API description are served', async () => {
  for (const path of ['/', '/docs/', '/openapi.yaml']) {
    const answer = await fetch(origin + path)
    require(answer.status === 200, `${path} answered ${answer.status}`)
  }
})

await check('SIGTERM stops everything that was started', async () => {
  await stop(server)
  require(leftovers().length === 0, `processes ${leftovers().join(', ')} still run`)
})

await check('a second start takes less than 10 s', async () => {
  const begun = performance.now()
  server = await start(port, 60_000)
  const seconds = (performance.now() - begun) / 1000
  console.log(`        second start: ${seconds.toFixed(1)} s`)
  await stop(server)
  require(seconds < 10, `it took ${seconds.toFixed(1)} s`)
})

rmSync(folder, { recursive: true, force: true })
mkdirSync(join(root, 'tests', 'output'), { recursive: true })
writeFileSync(join(root, 'tests', 'output', 'ci-first-start.json'), JSON.stringify(counts))
console.log(`first start: ${counts.passed} passed, ${counts.failed} failed`)
process.exit(counts.failed === 0 ? 0 : 1)

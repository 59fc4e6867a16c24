import { spawn } from 'node:child_process'
import { afterAll, beforeAll, describe, expect, it } from 'vitest'
import { seedDemo } from '../../server/demo/seed.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer, TestTeam } from '../support/server.ts'

let server: TestServer
let key: Awaited<ReturnType<TestTeam['createKey']>>

beforeAll(async () => {
  server = await startTestServer()
  const team = await server.createTeam()
  key = await team.createKey(['read', 'predict', 'adapt'])
  await seedDemo(server.services, team.caller('administrator'))
}, 120_000)

afterAll(() => server.stop())

/** Runs the demo as a process of its own; with `stopWhen`, interrupts it once that has come true. */
async function runDemo(options: string[], stopWhen?: () => Promise<boolean>) {
  const demo = spawn(process.execPath, ['--import', 'tsx', 'sdk/demo/main.ts', ...options], {
    env: { ...process.env, HEFTWISE_URL: server.origin, HEFTWISE_KEY: key.secret },
  })
  let [output, errors] = ['', '']
  demo.stdout.on('data', (data) => (output += data))
  demo.stderr.on('data', (data) => (errors += data))
  const ended = new Promise<number | null>((resolve) => demo.on('close', resolve))
  if (stopWhen) {
    while (demo.exitCode === null && !(await stopWhen())) await new Promise((resolve) => setTimeout(resolve, 200))
    demo.kill('SIGINT')
  }
  return { code: await ended, output, errors }
}

async function adapting(): Promise<{ robot: string; revision: number; created_at: string }[]> {
  return (await key.get('/v1/adaptations?state=adapting')).body.items
}

/** The numbers of the first row of a section that begins so. */
function rowOf(output: string, section: string, row: string): number[] {
  const lines = output.slice(output.indexOf(section)).split('\n')
  return lines
    .find((line) => line.trim().startsWith(row))!
    .trim()
    .slice(row.length)
    .trim()
    .split(/\s+/)
    .map(Number)
}

describe('the demo against a real server', () => {
  it('tracks better with the service than without, better adapting than not, and leaves both adaptations live', async () => {
    const { code, output, errors } = await runDemo(['--seconds', '16', '--seed', '3'])

    expect([code, errors]).toEqual([0, ''])
    expect(output).toContain('Alder-7 is a simulation')
    const [, live, mse, learned] = rowOf(output, 'Tracking error with a payload', 'all joints')
    expect(mse).toBeLessThan(live)
    expect(learned).toBeLessThan(live / 1.5)
    const unloaded = rowOf(output, 'Tracking error without payload', 'all joints')
    expect(unloaded[1]).toBeLessThan(unloaded[0] / 2)

    const items = await adapting()
    expect(items.map(({ robot }) => robot).sort()).toEqual(['kiln-cart-loader-1', 'kiln-cart-loader-1 (mse)'])
    expect(items.every(({ revision }) => revision > 100)).toBe(true)
  }, 180_000)

  it('stops at Ctrl-C with a table of what ran, and ends the adaptations of the run before', async () => {
    const before = (await adapting()).map(({ created_at: at }) => at)
    const isUnderWay = async () => (await adapting()).some(({ created_at: at, revision }) => !before.includes(at) && revision >= 5)
    const { code, output, errors } = await runDemo(['--seconds', '600', '--realtime'], isUnderWay)

    expect([code, errors]).toEqual([0, ''])
    expect(output).toContain('Stopped. The table covers what ran until then.')
    expect(output).toContain('Tracking error without payload')
    expect(await adapting()).toHaveLength(2)
    expect((await key.get('/v1/adaptations?state=ended')).body.items).toHaveLength(2)
  }, 120_000)

  it('says in a sentence which option is wrong', async () => {
    const { code, errors } = await runDemo(['--seconds', '3'])

    expect(code).toBe(1)
    expect(errors).toBe('--seconds is 3, expected 10 to 3600.\n')
  })
})

import { parseArgs } from 'node:util'
import { alder7 } from '../../shared/simulation/alder-7.ts'
import { planShift, scenario } from '../../shared/simulation/pottery.ts'
import { everyItem, isProblem } from '../index.ts'
import type { Heftwise, Schemas } from '../index.ts'
import { connect, DemoError, findAddress } from './connection.ts'
import { createLink } from './link.ts'
import type { Source } from './link.ts'
import { formatResults } from './table.ts'
import { runTrial } from './trial.ts'
import type { TrialResult } from './trial.ts'

const usage = `npm run demo -- [options]
  --seconds <s>   how long the arm works, 10 or more (default 40)
  --robot <name>  robot the adaptations are for (default ${scenario.robot})
  --seed <n>      another motion, other payloads, other noise (default 1)
  --realtime      at the pace of a real cell, so that the console shows it live; default: as fast as it goes
  --help`

const CAUTION = `Alder-7 is a simulation. Predicted torques are advisory: on a real arm keep the controller's torque, speed and
collision limits active, commission at reduced speed with nobody in reach, and leave the risk assessment to qualified people.`

interface Options {
  readonly seconds: number
  readonly robot: string
  readonly seed: number
  readonly isRealtime: boolean
}

function readOptions(): Options | undefined {
  const { values } = readArguments()
  if (values.help) return undefined
  const [seconds, seed] = [Number(values.seconds), Number(values.seed)]
  if (!(seconds >= 10 && seconds <= 3600)) throw new DemoError(`--seconds is ${values.seconds}, expected 10 to 3600.`)
  if (!Number.isInteger(seed) || seed < 0 || seed > 0xffffffff)
    throw new DemoError(`--seed is ${values.seed}, expected a whole number from 0 to 4294967295.`)
  return { seconds, robot: values.robot, seed, isRealtime: values.realtime }
}

function readArguments() {
  try {
    return parseArgs({
      options: {
        seconds: { type: 'string', default: '40' },
        robot: { type: 'string', default: scenario.robot },
        seed: { type: 'string', default: '1' },
        realtime: { type: 'boolean', default: false },
        help: { type: 'boolean', default: false },
      },
    })
  } catch (error) {
    throw new DemoError(`${(error as Error).message}\n${usage}`)
  }
}

async function main(signal: AbortSignal): Promise<void> {
  const options = readOptions()
  if (options === undefined) {
    console.log(usage)
    return
  }
  const address = findAddress(process.env)
  const { heftwise, joints } = await connect(address, scenario.arm, signal)
  const { seconds, robot, seed, isRealtime } = options
  const shift = planShift(seconds, seed)
  const carried = shift.loads.map(({ payload }) => `${payload.mass} kg`).join(', then ')
  console.log(CAUTION)
  console.log(`\n${robot} works for ${seconds} s and carries ${carried}; nobody tells the service how much.`)

  const { live_version: version } = await heftwise.models.get(scenario.model, { signal })
  if (version === null) throw new DemoError(`Model ${scenario.model} has no live version. Release one in the console, then try again.`)
  const mseRobot = `${robot} (mse)`
  await endEarlier(heftwise, [robot, mseRobot], signal)
  const { loss, mseRate } = await findLoss(heftwise, signal)
  const adapt = (settings: Pick<Schemas['NewAdaptation'], 'loss' | 'robot' | 'update'>): Promise<Schemas['Adaptation']> =>
    heftwise.adaptations.create(
      {
        model: scenario.model,
        // A loss belongs to the version it was learned for, whichever is live.
        version: loss.base_version,
        context: { tool: 'flat gripper', payload_class: '0.8 to 3 kg' },
        scheme: loss.scheme,
        ...settings,
      },
      { signal },
    )
  const mse = await adapt({ loss: 'mse', robot: mseRobot, ...(mseRate && { update: { kind: 'sgd', rate: mseRate } }) })
  const learned = await adapt({ loss: { name: scenario.loss, version: loss.version }, robot })

  const trials: { name: string; source?: Source }[] = [
    { name: 'without Heftwise' },
    { name: `live version ${version}`, source: { model: scenario.model } },
    { name: 'adapting, mse', source: { adaptation: mse.id } },
    { name: 'adapting, learned loss', source: { adaptation: learned.id } },
  ]
  const progress = createProgress(seconds)
  // One that fails ends the others.
  const failed = new AbortController()
  const anyEnd = AbortSignal.any([signal, failed.signal])
  const start = (trial: (typeof trials)[number], index: number): Promise<TrialResult> =>
    runTrial({
      name: trial.name,
      shift: planShift(seconds, seed),
      seed,
      isRealtime,
      signal: anyEnd,
      onProgress: (now) => progress.report(index, now),
      link:
        trial.source &&
        createLink({ heftwise, joints, source: trial.source, motion: shift.motion, size: alder7.limits.length, signal: anyEnd }),
    }).catch((error: unknown) => {
      failed.abort()
      throw error
    })
  // Side by side: at a real cell's pace one after the other would take four times as long.
  const results = await Promise.all(trials.map(start))
  progress.end()

  if (signal.aborted) console.log('Stopped. The table covers what ran until then.')
  const jointNames = alder7.nominal.joints.map(({ name }) => name)
  console.log(`\n${formatResults(results, jointNames)}\n`)
  for (const { name, link } of results) {
    if (!link?.onBase) continue
    console.log(`${name}: ${link.onBase} predictions came from the base version, as the adaptation stood still (frozen?).`)
  }
  console.log(`Without Heftwise the controller feeds forward its published rigid-body model: no friction, no payload.`)
  console.log(`Both adaptations go on living in the console: ${address.url}`)
}

// The newest version of the demo's loss, and the rate that plain squared error was found best with on the same recordings.
async function findLoss(
  heftwise: Heftwise,
  signal: AbortSignal,
): Promise<{ loss: Schemas['LossVersion']; mseRate: number | undefined }> {
  const { newest_version: newest } = await heftwise.losses.get(scenario.loss, { signal })
  if (newest === null) throw new DemoError(`Loss ${scenario.loss} has no version. Meta-train one in the console, then try again.`)
  const loss = await heftwise.losses.version(scenario.loss, newest, { signal })
  return { loss, mseRate: loss.validation.find(({ name }) => name === 'mse, sgd')?.rate }
}

// One run's adaptations are enough on the overview: those of an earlier run are ended, their logs stay.
async function endEarlier(heftwise: Heftwise, robots: readonly string[], signal: AbortSignal): Promise<void> {
  const earlier: string[] = []
  for (const robot of robots) {
    for (const state of ['adapting', 'frozen'] as const) {
      const page = (cursor: string | undefined) => heftwise.adaptations.list({ robot, model: scenario.model, state, cursor, signal })
      for await (const { id } of everyItem(page)) earlier.push(id)
    }
  }
  for (const id of earlier) await heftwise.adaptations.end(id, 'The demo starts again', { signal })
}

function createProgress(seconds: number): { report(index: number, now: number): void; end(): void } {
  const times: number[] = []
  let shown = -1
  return {
    report(index, now) {
      times[index] = now
      const slowest = Math.floor(Math.min(...times))
      if (!process.stdout.isTTY || slowest === shown) return
      shown = slowest
      process.stdout.write(`\r${slowest} of ${seconds} s `)
    },
    end() {
      if (process.stdout.isTTY) process.stdout.write('\r               \r')
    },
  }
}

const stop = new AbortController()
process.once('SIGINT', () => stop.abort())
process.once('SIGTERM', () => stop.abort())
try {
  await main(stop.signal)
} catch (error) {
  if (!stop.signal.aborted) {
    const isExpected = error instanceof DemoError || isProblem(error)
    console.error(isExpected ? (error as Error).message : error)
    process.exitCode = 1
  }
}

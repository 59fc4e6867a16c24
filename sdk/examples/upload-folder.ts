// Sends a folder of recordings through the API: the arm from its URDF or from --arm, then every CSV that recordings.csv lists.
//   npm run upload -- <folder> [--model <name>] [--arm arm.json] [--url http://…] [--key …]
// What is there already is not sent twice, so it can be stopped with Ctrl-C and run again.
import { openAsBlob, readdirSync, readFileSync, statSync } from 'node:fs'
import { basename, join, resolve } from 'node:path'
import { parseArgs } from 'node:util'
import { ConnectionError, Heftwise, isProblem, ProblemError } from '../index.ts'
import type { Schemas } from '../index.ts'
import { readRecordingsTable, type ListedRecording } from './recordings-table.ts'
import { jointsOfUrdf } from './urdf-joints.ts'

interface Options {
  readonly folder: string
  readonly url: string
  readonly key: string
  readonly armFile?: string
  readonly model?: string
}

const usage = `Usage: npm run upload -- <folder> [options]

  <folder>        holds recordings.csv (file, use, and if known motion, payload_kg, com_x_m, com_y_m, com_z_m), the CSV
                  files it lists, and the arm's URDF
  --arm <file>    a JSON file with the arm's description as POST /v1/arms takes it, instead of a URDF
  --model <name>  also start a model of the arm
  --url <url>     where Heftwise answers; unless given, from demo-credentials.json in the data folder
  --key <key>     a key with the scopes build and read; unless given, from the same file`

const stop = new AbortController()
process.once('SIGINT', () => stop.abort())

try {
  process.exitCode = await upload(readOptions())
} catch (error) {
  process.exitCode = 1
  console.error(stop.signal.aborted ? 'Stopped. Run it again to go on.' : explain(error))
}

async function upload({ folder, url, key, armFile, model }: Options): Promise<number> {
  const { signal } = stop
  const heftwise = new Heftwise({ url, key })
  const listed = readRecordingsTable(readFileSync(join(folder, 'recordings.csv'), 'utf8'))
  const given = armFile === undefined ? armOfUrdf(folder) : (JSON.parse(readFileSync(armFile, 'utf8')) as Schemas['NewArm'])
  const arm = await describeArm(heftwise, given)
  console.log(
    `Arm ${arm.name}: ${arm.joints.length} joints, fingerprint ${arm.joints_fingerprint}, gravity ` +
    `(${arm.gravity.join(', ')}) m/s², fallback ${arm.fallback}.`,
  )
  if (model !== undefined) await startModel(heftwise, model, arm.name)

  let sent = 0
  let refused = 0
  for (const [index, recording] of listed.entries()) {
    signal.throwIfAborted()
    const label = `[${String(index + 1).padStart(String(listed.length).length)}/${listed.length}] ${recording.file}`
    try {
      const { stored, seconds, rows } = await send(heftwise, folder, arm.name, recording)
      if (stored) sent += 1
      console.log(`${label}: ${stored ? `${rows} rows stored for ${recording.use}, ${seconds.toFixed(1)} s` : 'already there'}`)
    } catch (error) {
      if (!isProblem(error, 'recording-unreadable')) throw error
      refused += 1
      console.error(`${label}: refused. ${error.problem?.detail}`)
    }
  }
  console.log(`${sent} stored, ${listed.length - sent - refused} already there, ${refused} refused.`)
  return refused === 0 ? 0 : 1
}

async function send(heftwise: Heftwise, folder: string, arm: string, { file, use, context }: ListedRecording) {
  const path = join(folder, file)
  const startedAt = performance.now()
  const blob = await openAsBlob(path, { type: 'text/csv' })
  const { recording, stored } = await heftwise.recordings.upload(
    { arm, use, context, file: blob, fileName: basename(file) },
    { signal: stop.signal },
  )
  return { stored, rows: recording.rows, seconds: (performance.now() - startedAt) / 1000 }
}

/** Describes the arm, or takes the one of that name when its joints are the same. */
async function describeArm(heftwise: Heftwise, given: Schemas['NewArm']): Promise<Schemas['Arm']> {
  const { signal } = stop
  try {
    return await heftwise.arms.create(given, { signal })
  } catch (error) {
    if (!isProblem(error, 'name-taken')) throw error
    const known = await heftwise.arms.get(given.name, { signal })
    const names = (joints: { name: string }[]) => joints.map(({ name }) => name).join(', ')
    if (names(known.joints) === names(given.joints)) return known
    throw new Error(
      `There is an arm called ${given.name} already, with other joints: ${names(known.joints)}. ` +
      'Describe this one under another name with --arm.',
      { cause: error },
    )
  }
}

async function startModel(heftwise: Heftwise, name: string, arm: string): Promise<void> {
  try {
    await heftwise.models.create({ name, arm }, { signal: stop.signal })
    console.log(`Model ${name} started.`)
  } catch (error) {
    if (!isProblem(error, 'name-taken')) throw error
    console.log(`Model ${name} is there already.`)
  }
}

/**
 * What a URDF does not say is assumed here: floor mount, torque on the link side, nothing added by the controller. Use --arm
 * for another arm.
 */
function armOfUrdf(folder: string): Schemas['NewArm'] {
  const files = readdirSync(folder).filter((file) => file.endsWith('.urdf'))
  if (files.length !== 1)
    throw new Error(`${folder} holds ${files.length} URDF files, expected one. Name the arm's description with --arm arm.json.`)
  const { name, joints } = jointsOfUrdf(readFileSync(join(folder, files[0]), 'utf8'))
  return {
    name,
    description: `Described from ${files[0]}.`,
    joints,
    gravity: [0, 0, -9.81],
    torque: { side: 'link', positive_accelerates: true, controller_adds: [] },
    fallback: 'controlled_stop',
    horizon: 1,
  }
}

function readOptions(): Options {
  const { values, positionals } = parseArgs({
    allowPositionals: true,
    options: { arm: { type: 'string' }, model: { type: 'string' }, url: { type: 'string' }, key: { type: 'string' } },
  })
  if (positionals.length !== 1) throw new Error(usage)
  // npm runs scripts in the package's folder; what was typed is relative to where it was typed.
  const folder = resolve(process.env.INIT_CWD ?? '.', positionals[0])
  if (!statSync(folder, { throwIfNoEntry: false })?.isDirectory()) throw new Error(`${folder} is no folder.\n\n${usage}`)
  const credentials = values.url !== undefined && values.key !== undefined ? undefined : readCredentials()
  return {
    folder,
    url: values.url ?? credentials!.origin,
    key: values.key ?? credentials!.api_key,
    armFile: values.arm,
    model: values.model,
  }
}

function readCredentials(): { origin: string; api_key: string } {
  const file = join(process.env.HEFTWISE_DATA_DIR || '.data', 'demo-credentials.json')
  try {
    return JSON.parse(readFileSync(file, 'utf8')) as { origin: string; api_key: string }
  } catch (cause) {
    throw new Error(`${file} cannot be read. Start Heftwise once with npm start, or give --url and --key.`, { cause })
  }
}

function explain(error: unknown): string {
  if (error instanceof ConnectionError) return `${error.message} Is it running? Start it with npm start.`
  if (error instanceof ProblemError) {
    const faults = error.problem?.errors?.slice(0, 10).map(({ pointer, detail }) => `\n  ${pointer ?? ''} ${detail}`) ?? []
    return error.message + faults.join('')
  }
  return error instanceof Error ? error.message : String(error)
}

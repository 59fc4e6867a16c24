// Rebuilds what the first run seeds the demo from: recordings of the simulated Alder-7, a base version fitted on them, and a
// loss meta-trained for that version. Everything follows from seeds; takes some minutes.
import { createHash } from 'node:crypto'
import { mkdirSync, readdirSync, rmSync, writeFileSync } from 'node:fs'
import { join } from 'node:path'
import { gzipSync } from 'node:zlib'
import type { components } from '../../shared/contract/openapi.generated.ts'
import { lossToWire, versionToWire } from '../../shared/contract/snapshots.ts'
import { createKernelMetaGradient } from '../../shared/dynamics/kernels/meta-gradient.ts'
import { createKernels } from '../../shared/dynamics/kernels/kernels.ts'
import { encodeLossVersion } from '../../shared/dynamics/loss-version.ts'
import type { LossVersion } from '../../shared/dynamics/loss-version.ts'
import { defaultMetaTrainingOptions, metaTrain } from '../../shared/dynamics/meta-training.ts'
import type { MetaTrainingResult } from '../../shared/dynamics/meta-training.ts'
import { normaliseMotion } from '../../shared/dynamics/motion.ts'
import type { Motion } from '../../shared/dynamics/motion.ts'
import { encodeVersion } from '../../shared/dynamics/version.ts'
import { demoRecordings, scenario } from '../../shared/simulation/pottery.ts'
import type { DemoRecording } from '../../shared/simulation/pottery.ts'
import { toCsv } from '../../shared/simulation/recording.ts'
import type { SimulatedRecording } from '../../shared/simulation/recording.ts'
import { defaultFitOptions, fitNetwork } from '../jobs/training/fit-network.ts'
import type { FitResult } from '../jobs/training/fit-network.ts'
import { alder7Arm, describeRecording } from './alder-7-arm.ts'

type Schemas = components['schemas']

const folder = join(import.meta.dirname, 'artefacts')

// All recordings teach; so many of each kind are kept in the repository, for the console's lists and for trying jobs.
const kept: Record<string, number> = {
  slow: 1,
  unloaded: 3,
  loaded: 4,
  switching: 2,
  validation: 2,
  'validation-switching': 1,
  evaluation: 2,
  'grip-release': 1,
}

const recordings = demoRecordings().map((recording) => {
  const made = recording.make()
  return { ...recording, made, rows: toMotion(recording.name, made) }
})
const withUse = (use: DemoRecording['use']): Motion[] =>
  recordings.filter((recording) => recording.use === use).map(({ rows }) => rows)

say(`${recordings.length} recordings simulated`)
const kernels = createKernels()
const base = await fitBase()
const version = versionSnapshot(base)
const learned = learnLoss(base)
const loss = lossSnapshot(learned, version.checksum)
write()

async function fitBase(): Promise<FitResult> {
  const motions = withUse('fit')
  const isHeldOut = (_: Motion, index: number): boolean => index % 5 === 4
  return fitNetwork(
    motions.filter((motion, k) => !isHeldOut(motion, k)),
    motions.filter(isHeldOut),
    {
      ...defaultFitOptions,
      epochs: 60,
      joints: 7,
      onEpoch: ({ epoch, epochs, trainingError, heldOutError }) => {
        if (epoch % 10 === 0)
          say(`fit: epoch ${epoch} of ${epochs}, error ${trainingError.toPrecision(3)}, held out ${heldOutError.toPrecision(3)}`)
      },
    },
  )
}

function learnLoss({ version: { description, parameters } }: FitResult): MetaTrainingResult {
  const normalised = (use: DemoRecording['use']) =>
    withUse(use).map((motion) => normaliseMotion(motion, description.normalisation))
  const steps = metaTrain(
    { network: description.network, parameters: Float64Array.from(parameters) },
    normalised('meta_train'),
    normalised('validate'),
    { ...defaultMetaTrainingOptions, createMetaGradient: (shape) => createKernelMetaGradient(kernels, shape) },
  )
  for (;;) {
    const { value, done } = steps.next()
    if (done) return value
    if (value.phase === 'updates' && value.validation !== undefined) {
      say(`loss: update ${value.update} of ${value.updates}, next-batch error ${value.validation.toPrecision(3)} on validation`)
    }
  }
}

function versionSnapshot({ version: fitted, metrics }: FitResult): Schemas['VersionSnapshot'] {
  const joints = alder7Arm().joints
  const perJoint = (rmse: readonly number[]): Schemas['JointMetric'][] =>
    rmse.map((value, j) => ({ joint: joints[j].name, rmse: Number(value.toPrecision(4)), unit: 'N·m' }))
  const { outputStd } = fitted.description.normalisation
  const errorOf = (rmse: readonly number[]): number =>
    rmse.reduce((sum, value, j) => sum + (value / outputStd[j]) ** 2, 0) / rmse.length
  return {
    format: 'heftwise-version-1',
    model: scenario.model,
    version: 1,
    joint_names: joints.map(({ name }) => name),
    unit: joints.map(() => 'N·m'),
    torque_limits: joints.map(({ torque_limit: limit }) => limit),
    ...versionToWire(fitted),
    checksum: sha256(encodeVersion(fitted)),
    metrics: {
      error: metrics.heldOutError,
      per_joint: perJoint(metrics.rmse),
      recordings: metrics.motions.map(({ name, rmse }) => ({ name, error: errorOf(rmse), per_joint: perJoint(rmse) })),
    },
  }
}

function lossSnapshot(
  { learned: { rule, error, name }, rivals, none }: MetaTrainingResult,
  baseChecksum: string,
): Schemas['LossSnapshot'] {
  const lossVersion: LossVersion = {
    description: {
      kind: 'state_dependent',
      positive: rule.lossShape.positive,
      joints: rule.lossShape.joints,
      hidden: rule.lossShape.hidden,
      baseChecksum,
      scheme: rule.scheme,
      update: { kind: rule.update, rate: rule.rate, rowsPerStep: rule.rowsPerStep, fade: 1 },
    },
    parameters: Float32Array.from(rule.lossParameters),
  }
  return {
    format: 'heftwise-loss-1',
    ...lossToWire(lossVersion),
    checksum: sha256(encodeLossVersion(lossVersion)),
    validation: [
      { name: 'none', error: none },
      ...rivals.map((rival) => ({ name: rival.name, error: rival.error, rate: rival.rule.rate })),
      { name, error, rate: rule.rate },
    ],
  }
}

function write(): void {
  mkdirSync(folder, { recursive: true })
  for (const file of readdirSync(folder)) if (file.endsWith('.gz')) rmSync(join(folder, file))
  const inRepository = recordings.filter(
    ({ name }) => Number(/(\d+)\.csv$/.exec(name)![1]) <= kept[name.replace(/-\d+\.csv$/, '')],
  )
  const demo = {
    about: 'Invented and simulated throughout. Made by: npm run demo:artefacts',
    arm: alder7Arm(),
    model: {
      name: scenario.model,
      arm: scenario.arm,
      description: 'Inverse dynamics of Alder-7 without payload. Fitted on simulated recordings.',
    },
    version: 'alder-7-base.json.gz',
    loss: {
      name: scenario.loss,
      model: scenario.model,
      kind: 'state_dependent',
      description: 'For shaped clay of 0.8 to 3 kg in the gripper. Meta-trained on simulated recordings.',
    },
    loss_version: 'alder-7-payload.json.gz',
    recordings: inRepository.map(describeRecording),
    robot: scenario.robot,
  }
  let bytes = 0
  const put = (file: string, content: string): void => {
    const data = file.endsWith('.gz') ? gzipSync(content, { level: 9 }) : Buffer.from(content)
    writeFileSync(join(folder, file), data)
    bytes += data.length
  }
  put('demo.json', `${JSON.stringify(demo, null, 2)}\n`)
  put(demo.version, JSON.stringify(version))
  put(demo.loss_version, JSON.stringify(loss))
  for (const { name, made } of inRepository) put(`${name}.gz`, toCsv(made))
  say(`${inRepository.length + 3} files, ${(bytes / 1e6).toFixed(2)} MB, in server/demo/artefacts`)
  for (const { name, error } of loss.validation!)
    say(`  ${name}: ${error.toPrecision(3)} next-batch error on validation recordings`)
}

function toMotion(name: string, { time, position, velocity, acceleration, torque }: SimulatedRecording): Motion {
  const n = torque.length / time.length
  const states = new Float64Array(3 * torque.length)
  for (let row = 0; row < time.length; row++) {
    ;[position, velocity, acceleration].forEach((values, k) =>
      states.set(values.subarray(row * n, (row + 1) * n), 3 * n * row + k * n),
    )
  }
  return { name, rows: time.length, time, states, torque }
}

function sha256(bytes: Uint8Array): string {
  return createHash('sha256').update(bytes).digest('hex')
}

function say(line: string): void {
  console.log(line)
}

/**
 * Fits a base on a folder of recordings, meta-trains losses on it and prints the next-batch errors of every way to adapt:
 * settings chosen on the recordings to validate, figures of those to evaluate.
 *
 *   nice -n 15 npx tsx tests/load/learning.ts FOLDER [--seeds 1,2,3] [--losses structured,state_dependent] [--schemes all]
 *     [--updates 800] [--epochs 60] [--activation relu] [--verbose]
 *
 * FOLDER holds recordings.csv (columns file and use) and the files it names.
 */
import { parseArgs } from 'node:util'
import { createKernels } from '../../shared/dynamics/kernels/kernels.ts'
import { createKernelMetaGradient } from '../../shared/dynamics/kernels/meta-gradient.ts'
import { createKernelNextBatch } from '../../shared/dynamics/kernels-next-batch.ts'
import { defaultFitOptions, fitNetwork } from '../../server/jobs/training/fit-network.ts'
import type { LossName } from '../../shared/dynamics/losses/index.ts'
import type { ChainShape, Scheme } from '../../shared/dynamics/meta-gradient.ts'
import { defaultMetaTrainingOptions, metaTrain, type TunedRule } from '../../shared/dynamics/meta-training.ts'
import { normaliseMotion, type NormalisedMotion } from '../../shared/dynamics/motion.ts'
import type { Activation } from '../../shared/dynamics/network.ts'
import {
  meanNextBatchError, measureNextBatch, predictMotion, type AdaptationRule, type Base,
} from '../../shared/dynamics/prequential.ts'
import { readMotionsByUse } from './motions.ts'

/** Seconds between two looks at how far the prediction has come from the base's, and at what one batch changed. */
const batchSeconds = 0.64

const { values, positionals } = parseArgs({
  allowPositionals: true,
  options: {
    seeds: { type: 'string', default: '1' },
    losses: { type: 'string', default: 'structured,state_dependent' },
    schemes: { type: 'string', default: 'all' },
    updates: { type: 'string', default: String(defaultMetaTrainingOptions.updates) },
    epochs: { type: 'string', default: String(defaultFitOptions.epochs) },
    activation: { type: 'string', default: 'relu' },
    verbose: { type: 'boolean', default: false },
  },
})

const kernels = createKernels()
const measure = createKernelNextBatch(kernels)
const byUse = readMotionsByUse(positionals[0])
const joints = byUse.fit[0].torque.length / byUse.fit[0].rows

for (const seed of values.seeds.split(',').map(Number)) {
  const heldOut = byUse.fit.filter((_, index) => index % 5 === 4)
  const training = byUse.fit.filter((_, index) => index % 5 !== 4)
  const started = performance.now()
  const fit = await fitNetwork(training, heldOut, {
    ...defaultFitOptions, joints, seed, epochs: Number(values.epochs), activation: values.activation as Activation,
  })
  console.log(`seed ${seed}: base fitted in ${seconds(started)} s, held-out error ${fit.metrics.heldOutError.toFixed(4)}`)

  const { network, normalisation } = fit.version.description
  const base: Base = { network, parameters: Float64Array.from(fit.version.parameters) }
  const normalise = (use: string) => byUse[use].map(motion => normaliseMotion(motion, normalisation))
  for (const scheme of values.schemes.split(',') as Scheme[]) {
    for (const loss of values.losses.split(',') as LossName[]) compareOne(base, normalise, scheme, loss, seed)
  }
}

function compareOne(
  base: Base, normalise: (use: string) => NormalisedMotion[], scheme: Scheme, loss: LossName, seed: number,
): void {
  const validation = normalise('validate')
  const evaluation = normalise('evaluate')
  const started = performance.now()
  const run = metaTrain(base, normalise('meta_train'), validation, {
    ...defaultMetaTrainingOptions, scheme, loss, seed, updates: Number(values.updates), measure,
    ...(scheme !== 'bias' && { createMetaGradient: (shape: ChainShape) => createKernelMetaGradient(kernels, shape) }),
  })
  let step = run.next()
  for (; !step.done; step = run.next()) {
    const progress = step.value
    if (values.verbose && progress.phase === 'updates' && progress.validation !== undefined) {
      console.log(`  ${progress.update}: outer ${progress.outer.toFixed(4)}, validation ${progress.validation.toFixed(4)}`)
    }
  }
  const { learned, none, rivals } = step.value
  console.log(`  scheme ${scheme}, ${seconds(started)} s. none: validation ${none.toFixed(4)}`)
  const learnedError = meanNextBatchError(base, evaluation, learned.rule, measure)
  for (const tuned of [...rivals, learned]) {
    const error = meanNextBatchError(base, evaluation, tuned.rule, measure)
    console.log(`  ${tuned.name.padEnd(16)} rate ${tuned.rule.rate.toPrecision(3).padEnd(9)} validation ${tuned.error.toFixed(4)}`
      + `  evaluation ${error.toFixed(4)}  ÷ ${loss} ${(error / learnedError).toFixed(2)}`)
    if (values.verbose) printSteps(base, validation, tuned)
  }
}

/**
 * What guards bound, along the motions: norms of single steps, and changes of predicted torque on spread states, by one
 * batch of 32 rows and in all, in base standard deviations, the largest over states and joints.
 */
function printSteps(base: Base, motions: NormalisedMotion[], { rule }: TunedRule): void {
  const norms: number[] = []
  const changes: number[] = []
  const drifts: number[] = []
  const references = spreadRows(motions)
  const everySteps = Math.max(1, Math.round(batchSeconds / (rule.rowsPerStep * 0.02)))
  for (const motion of motions) {
    const start = predictAt(base, base.parameters, references, rule)
    let last = start
    let from = base.parameters
    measureNextBatch(base, motion, rule, (step, adapted) => {
      if ((step + 1) % everySteps !== 0) return
      const now = predictAt(base, adapted, references, rule)
      changes.push(largestDifference(last, now))
      drifts.push(largestDifference(start, now))
      if (rule.scheme !== 'bias') norms.push(distance(from, adapted))
      last = now
      from = adapted.slice()
    })
  }
  for (const [name, found] of Object.entries({ 'batch norm': norms, 'batch change of torque': changes, drift: drifts })) {
    if (found.length === 0) continue
    found.sort((a, b) => a - b)
    const at = (share: number) => found[Math.floor(share * (found.length - 1))].toPrecision(3)
    console.log(`    ${name}: median ${at(0.5)}, 95 % ${at(0.95)}, 99 % ${at(0.99)}, most ${at(1)}`)
  }
}

function spreadRows(motions: NormalisedMotion[]): NormalisedMotion {
  const rows = 32
  const inputs = motions[0].x.length / motions[0].rows
  const x = new Float64Array(rows * inputs)
  for (let r = 0; r < rows; r++) {
    const motion = motions[r % motions.length]
    const row = Math.floor(((r + 0.5) * motion.rows) / rows)
    x.set(motion.x.subarray(row * inputs, (row + 1) * inputs), r * inputs)
  }
  return { name: 'reference states', rows, time: new Float64Array(rows), x, measured: new Float64Array(rows) }
}

function predictAt(base: Base, adapted: Float64Array, references: NormalisedMotion, rule: AdaptationRule): Float64Array {
  return rule.scheme === 'bias' ? adapted.slice() : predictMotion({ network: base.network, parameters: adapted }, references)
}

function largestDifference(a: Float64Array, b: Float64Array): number {
  return a.reduce((most, value, k) => Math.max(most, Math.abs(value - b[k])), 0)
}

function distance(a: Float64Array, b: Float64Array): number {
  return Math.sqrt(a.reduce((sum, value, k) => sum + (value - b[k]) ** 2, 0))
}

function seconds(started: number): string {
  return ((performance.now() - started) / 1000).toFixed(1)
}

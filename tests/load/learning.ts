/**
 * Fits a base on a folder of recordings, meta-trains losses on it and prints the next-batch errors of every way to adapt:
 * settings chosen on the recordings to validate, figures of those to evaluate.
 *
 *   nice -n 15 npx tsx tests/load/learning.ts FOLDER [--seeds 1,2,3] [--losses structured,state_dependent] [--schemes all]
 *     [--updates 400] [--epochs 150] [--activation relu]
 *
 * FOLDER holds recordings.csv (columns file and use) and the files it names.
 */
import { parseArgs } from 'node:util'
import { defaultFitOptions, fitNetwork } from '../../server/jobs/training/fit-network.ts'
import type { LossName } from '../../shared/dynamics/losses/index.ts'
import type { Scheme } from '../../shared/dynamics/meta-gradient.ts'
import { defaultMetaTrainingOptions, metaTrain, type TunedRule } from '../../shared/dynamics/meta-training.ts'
import { normaliseMotion, type NormalisedMotion } from '../../shared/dynamics/motion.ts'
import type { Activation } from '../../shared/dynamics/network.ts'
import { meanNextBatchError, measureNextBatch, type Base } from '../../shared/dynamics/prequential.ts'
import { readMotionsByUse } from './motions.ts'

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

function compareOne(base: Base, normalise: (use: string) => NormalisedMotion[], scheme: Scheme, loss: LossName, seed: number): void {
  const validation = normalise('validate')
  const evaluation = normalise('evaluate')
  const started = performance.now()
  const run = metaTrain(base, normalise('meta_train'), validation, {
    ...defaultMetaTrainingOptions, scheme, loss, seed, updates: Number(values.updates),
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
  const learnedError = meanNextBatchError(base, evaluation, learned.rule)
  for (const tuned of [...rivals, learned]) {
    const error = meanNextBatchError(base, evaluation, tuned.rule)
    console.log(`  ${tuned.name.padEnd(16)} rate ${tuned.rule.rate.toPrecision(3).padEnd(9)} validation ${tuned.error.toFixed(4)}`
      + `  evaluation ${error.toFixed(4)}  ÷ ${loss} ${(error / learnedError).toFixed(2)}`)
    if (values.verbose) printSteps(base, validation, tuned)
  }
}

/** Sizes of single steps, for choosing a guard's bound. */
function printSteps(base: Base, motions: NormalisedMotion[], { rule }: TunedRule): void {
  const norms: number[] = []
  for (const motion of motions) measureNextBatch(base, motion, rule, (_step, _adapted, norm) => norms.push(norm))
  norms.sort((a, b) => a - b)
  const at = (share: number) => norms[Math.floor(share * (norms.length - 1))].toPrecision(3)
  console.log(`    step norm: median ${at(0.5)}, 95 % ${at(0.95)}, 99 % ${at(0.99)}, most ${at(1)}`)
}

function seconds(started: number): string {
  return ((performance.now() - started) / 1000).toFixed(1)
}

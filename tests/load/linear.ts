/**
 * Learns the constants of linear schemes on a folder of recordings and prints their errors beside their rivals': settings
 * chosen on the recordings to validate, figures of those to evaluate.
 *
 *   nice -n 15 npx tsx tests/load/linear.ts FOLDER [--bases identified,network] [--schemes payload,context]
 *     [--updates recursive,mse,structured,state_dependent,least_squares] [--seeds 1,2,3] [--rounds 180] [--version FILE]
 *     [--recorded-only] [--verbose]
 *
 * FOLDER holds recordings.csv (columns file, payload_kg and use), the files it names and one URDF. Motions whose name begins
 * with switching or grip-release have their payload gripped at 10 s and released at 20 s. --version: a network base to use
 * instead of fitting one. --recorded-only: no simulated payloads, as for an arm without a URDF.
 */
import { readdirSync, readFileSync } from 'node:fs'
import { join } from 'node:path'
import { parseArgs } from 'node:util'
import { defaultFitOptions, fitNetwork } from '../../server/jobs/training/fit-network.ts'
import { importUrdf } from '../../server/services/urdf.ts'
import { createRigidBodyEvaluator, identifyBase } from '../../shared/dynamics/identification/index.ts'
import type { IdentifiedBase } from '../../shared/dynamics/identification/index.ts'
import { createPayloadBasis, type Basis } from '../../shared/dynamics/linear/basis.ts'
import { fitContextBasis } from '../../shared/dynamics/linear/context-fit.ts'
import { learnLinear, type LinearCandidate } from '../../shared/dynamics/linear/learn.ts'
import { fitConstant } from '../../shared/dynamics/linear/least-squares.ts'
import {
  mixedMotions, prepareMotion, simulatedMotions, type BaseEvaluator, type LinearMotion,
} from '../../shared/dynamics/linear/linear-motion.ts'
import { meanErrors, measureLinear } from '../../shared/dynamics/linear/measure.ts'
import { defaultLinearMetaTrainingOptions } from '../../shared/dynamics/linear/meta-training.ts'
import { createKernels } from '../../shared/dynamics/kernels/kernels.ts'
import type { LinearUpdate } from '../../shared/dynamics/linear/update.ts'
import { fitNormalisation, normaliseMotion, type Motion } from '../../shared/dynamics/motion.ts'
import { predictMotion } from '../../shared/dynamics/prequential.ts'
import { createRandom } from '../../shared/dynamics/random.ts'
import { decodeVersion, type Normalisation, type Version } from '../../shared/dynamics/version.ts'
import { readMotionsByUse } from './motions.ts'

const { values, positionals } = parseArgs({
  allowPositionals: true,
  options: {
    bases: { type: 'string', default: 'identified,network' },
    schemes: { type: 'string', default: 'payload,context' },
    updates: { type: 'string', default: 'recursive,mse,state_dependent,least_squares' },
    seeds: { type: 'string', default: '1' },
    rounds: { type: 'string', default: String(defaultLinearMetaTrainingOptions.updates) },
    version: { type: 'string' },
    'recorded-only': { type: 'boolean', default: false },
    verbose: { type: 'boolean', default: false },
  },
})
const folder = positionals[0]
const byUse = readMotionsByUse(folder)
const { chain } = importUrdf(readFileSync(join(folder, readdirSync(folder).find(name => name.endsWith('.urdf'))!), 'utf8'))
const joints = chain.joints.length
const contexts = contextsOf(folder)

for (const seed of values.seeds.split(',').map(Number)) {
  for (const base of values.bases.split(',')) {
    if (base === 'identified') compareOn('identified', identified(), seed)
    else compareOn('network', await network(seed), seed)
  }
}

interface Ground {
  readonly normalisation: Normalisation
  evaluator(motion: Motion): BaseEvaluator
  readonly rigid: IdentifiedBase | null
}

function identified(): Ground {
  const started = performance.now()
  const { base, rank, conditioning, constrained, afterPerJoint } = finish(identifyBase(chain, byUse.fit))
  console.log(`identified base in ${seconds(started)} s: rank ${rank}, conditioning ${conditioning.toFixed(0)}, `
    + `constrained ${constrained}, `
    + `error per joint ${afterPerJoint.map(value => value.toFixed(3)).join(' ')} N·m`)
  const evaluator = createRigidBodyEvaluator(base)
  return { normalisation: fitNormalisation(byUse.fit, joints), evaluator: () => evaluator, rigid: base }
}

async function network(seed: number): Promise<Ground> {
  const started = performance.now()
  const version = values.version ? decodeVersion(readFileSync(values.version)) : await fitted(seed)
  console.log(`network base, seed ${seed}, in ${seconds(started)} s`)
  const { description } = version
  const base = { network: description.network, parameters: Float64Array.from(version.parameters) }
  const { outputMean, outputStd } = description.normalisation
  return {
    normalisation: description.normalisation,
    rigid: null,
    evaluator: motion => ({
      evaluate(_states, _rows, torque) {
        predictMotion(base, normaliseMotion(motion, description.normalisation)).forEach((value, k) => {
          torque[k] = value * outputStd[k % joints] + outputMean[k % joints]
        })
      },
    }),
  }
}

async function fitted(seed: number): Promise<Version> {
  const isHeldOut = (_: Motion, index: number) => index % 5 === 4
  const training = byUse.fit.filter((motion, index) => !isHeldOut(motion, index))
  return (await fitNetwork(training, byUse.fit.filter(isHeldOut), { ...defaultFitOptions, joints, seed })).version
}

function compareOn(name: string, ground: Ground, seed: number): void {
  for (const scheme of values.schemes.split(',')) {
    const started = performance.now()
    const basis = scheme === 'payload' ? payloadBasis(ground) : contextBasis(ground, seed)
    if (scheme === 'context') console.log(`context basis in ${seconds(started)} s`)
    const prepare = (motion: Motion) =>
      prepareMotion(motion, ground.evaluator(motion), basis, ground.normalisation, contexts.get(motion.name)!)
    const own = [...byUse.meta_train, ...byUse.fit.filter(({ name: file }) => file.startsWith('unloaded'))].map(prepare)
    const simulated = values['recorded-only'] ? [] : simulatedMotions(own.filter(({ unloaded }) => unloaded), createRandom(seed),
      scheme === 'payload' ? null : payloadTable(ground))
    const training = [...own, ...simulated]
    const validation = byUse.validate.map(prepare)
    const evaluation = byUse.evaluate.map(prepare)
    const title = `${name}, ${scheme}`
    const noise = evaluation.filter(({ changes }) => changes!.length === 0).map(motion => fitConstant(motion).error)
    console.log(`\n${title}: floor (best constant z) ${noise.map(value => value.toFixed(4)).join(' ')}`)
    console.log(
      `${'update'.padEnd(18)} next     0.4 s    1 s      frozen   | switch next, 1 s `
      + '| unloaded next, 1 s ÷ none | after 2 s, 1 s | µs a step | friction × 1.25, frozen',
    )
    report('none', null, evaluation, own)
    for (const update of values.updates.split(',') as LinearCandidate[]) {
      const begun = performance.now()
      const learned = finish(learnLinear(update, training, validation, {
        ...defaultLinearMetaTrainingOptions, seed, updates: Number(values.rounds), positive: 'exp', hidden: 32,
      }), progress => {
        if (values.verbose && progress.validation !== undefined) console.log(
          `  ${progress.update} outer ${progress.outer.toFixed(3)} validation ${progress.validation.toFixed(3)}`,
        )
      })
      report(update, learned.create(), evaluation, own)
      console.log(`  learned in ${seconds(begun)} s${learned.update === undefined ? '' : `, kept update ${learned.update}`}`)
      if (values.verbose && learned.constants.kind !== 'first_order') console.log(shortJson(learned.constants))
    }
  }
}

function payloadBasis({ rigid, normalisation }: Ground): Basis {
  const { outputStd } = normalisation
  return createPayloadBasis({ chain: rigid?.chain ?? chain, outputStd, friction: rigid?.friction ?? null })
}

/** The payload basis on the rows of a motion, whose states are found by its name. */
function payloadTable(ground: Ground): (motion: LinearMotion) => Float64Array {
  const basis = createPayloadBasis({ chain, outputStd: ground.normalisation.outputStd, friction: null })
  return ({ name, rows }) => {
    const table = new Float64Array(rows * joints * basis.size)
    basis.evaluate(Object.values(byUse).flat().find(motion => motion.name === name)!.states, rows, table)
    return table
  }
}

function contextBasis(ground: Ground, seed: number): Basis {
  const nothing: Basis = { size: 0, joints, evaluate: () => {} }
  const motions = [...byUse.meta_train, ...byUse.fit.filter(({ name }) => name.startsWith('unloaded'))]
    .map(motion => prepareMotion(motion, ground.evaluator(motion), nothing, ground.normalisation, contexts.get(motion.name)!))
  const mixed = values['recorded-only'] ? []
    : mixedMotions([...byUse.meta_train, ...byUse.fit], payloadBasis(ground), ground.normalisation, 120, 1500, createRandom(seed))
  return finish(fitContextBasis(createKernels(), [...motions, ...mixed], ground.normalisation, { seed }), progress => {
    if (values.verbose && progress.step % 500 === 0) console.log(`  ${progress.step} error ${progress.error.toFixed(4)}`)
  }).basis
}

function report(title: string, update: LinearUpdate | null, evaluation: LinearMotion[], own: LinearMotion[]): void {
  const nothing = (motion: LinearMotion) => {
    let sum = 0
    for (const value of motion.residual) sum += value * value
    const error = sum / motion.residual.length
    return { nextBatch: error, stale04: error, stale1: error, after2sStale1: error, frozen: error }
  }
  const started = performance.now()
  const errorsOf = (motion: LinearMotion) => (update ? measureLinear(update, motion) : nothing(motion))
  const of = (motions: LinearMotion[]) => meanErrors(motions.map(errorsOf))
  const steady = of(evaluation.filter(({ changes }) => changes!.length === 0))
  const took = performance.now() - started
  const switching = of(evaluation.filter(({ changes }) => changes!.length > 0))
  const unloadedMotions = own.filter(({ unloaded }) => unloaded)
  const unloaded = of(unloadedMotions)
  const hurt = unloaded.stale1 / meanErrors(unloadedMotions.map(nothing)).stale1
  const steps = evaluation.filter(({ changes }) => changes!.length === 0).reduce((sum, { rows }) => sum + rows / 4, 0)
  const cells = [steady.nextBatch, steady.stale04, steady.stale1, steady.frozen].map(value => value.toFixed(4).padEnd(8))
  // Friction a quarter higher, where the basis has a scale for it (its unit is 0.2).
  const size = own[0].basis.length / own[0].residual.length
  const rubbing = size === 5 ? of(evaluation.filter(({ changes }) => changes!.length === 0).map(motion => ({
    ...motion, residual: motion.residual.map((value, k) => value + 1.25 * motion.basis[k * 5 + 4]),
  }))).frozen.toFixed(4) : ''
  console.log(`${title.padEnd(18)} ${cells.join(' ')} | ${switching.nextBatch.toFixed(4)} ${switching.stale1.toFixed(4)} | `
    + `${unloaded.nextBatch.toFixed(4)} ${unloaded.stale1.toFixed(4)} ${hurt.toFixed(2)} | `
    + `${steady.after2sStale1.toFixed(4)} | ${((1000 * took) / steps).toFixed(0)} | ${rubbing}`)
}

function contextsOf(from: string): Map<string, { unloaded: boolean; changes: number[] }> {
  const [header, ...lines] = readFileSync(join(from, 'recordings.csv'), 'utf8').trim().split('\n')
  const columns = header.split(',')
  return new Map(lines.map(line => {
    const cells = line.split(',')
    const name = cells[columns.indexOf('file')].replace('.csv', '')
    const isSwitching = name.startsWith('switching') || name.startsWith('grip-release')
    return [name, { unloaded: Number(cells[columns.indexOf('payload_kg')]) === 0, changes: isSwitching ? [10, 20] : [] }]
  }))
}

function finish<P, R>(run: Generator<P, R>, onProgress?: (progress: P) => void): R {
  let step = run.next()
  for (; !step.done; step = run.next()) onProgress?.(step.value)
  return step.value
}

function shortJson(value: object): string {
  return JSON.stringify(value, (_, entry) => (typeof entry === 'number' ? Number(entry.toPrecision(3)) : entry))
}

function seconds(started: number): string {
  return ((performance.now() - started) / 1000).toFixed(1)
}

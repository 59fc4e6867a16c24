import { createKernels } from '../../shared/dynamics/kernels/kernels.ts'
import { createKernelNextBatch } from '../../shared/dynamics/kernels-next-batch.ts'
import { defaultMetaTrainingOptions, metaTrain, type TunedRule } from '../../shared/dynamics/meta-training.ts'
import { normaliseMotion } from '../../shared/dynamics/motion.ts'
import type { Version as VersionArtefact } from '../../shared/dynamics/version.ts'
import type { StoredJointMetric, StoredMetrics, Version } from '../models/version.ts'
import { fitNetwork, type FitMetrics } from './training/fit-network.ts'
import type { JobInput, JobOutput, JobReport } from './worker-messages.ts'

type FitInput = JobInput & { kind: 'fit' }

/** Share of the job's progress that is the fit itself; the rest chooses a rate. */
const FIT_SHARE = 0.9

/** The job `fit`: a base network, its metrics on recordings it did not see, and settings for adapting it by squared error. */
export async function runFit(input: FitInput, report: JobReport): Promise<JobOutput> {
  const { joints, training, heldOut, validation, parameters } = input
  const { hidden, activation, epochs, rowsPerStep, rate, seed } = parameters
  const { version, metrics } = await fitNetwork(training, heldOut, {
    joints: joints.length,
    hidden,
    activation,
    epochs,
    rowsPerStep,
    rate,
    seed,
    onEpoch({ epoch, trainingError, heldOutError }) {
      report.point('training', epoch, trainingError)
      report.point('held out', epoch, heldOutError)
      report.progress(
        (FIT_SHARE * epoch) / epochs,
        `Epoch ${epoch} of ${epochs}: error ${heldOutError.toPrecision(3)} on held-out recordings.`,
      )
      report.throwIfCancelled()
    },
  })
  const recommended = validation.length === 0 ? {} : recommend(version, input, report)
  return {
    kind: 'fit',
    artefact: version,
    metrics: metricsOf(metrics, input, version.description.normalisation.outputStd),
    recommended,
  }
}

/** The better of stochastic gradient steps and Adam, each at its best rate on the validation recordings. */
function recommend(
  { description, parameters }: VersionArtefact,
  { validation }: FitInput,
  report: JobReport,
): Version['recommended'] {
  const motions = validation.map((motion) => normaliseMotion(motion, description.normalisation))
  const base = { network: description.network, parameters: Float64Array.from(parameters) }
  const search = metaTrain(base, motions, motions, {
    ...defaultMetaTrainingOptions,
    loss: 'mse',
    innerSteps: 1,
    measure: createKernelNextBatch(createKernels()),
  })
  for (let tried = 1; ; tried++) {
    report.throwIfCancelled()
    const { done, value } = search.next()
    if (done) {
      const best = value.rivals.reduce((a: TunedRule, b: TunedRule) => (b.error < a.error ? b : a))
      const { update, rate, rowsPerStep, scheme } = best.rule
      return { scheme, update: { kind: update, rate, rowsPerStep } }
    }
    report.progress(FIT_SHARE + (1 - FIT_SHARE) * (1 - 1 / (1 + tried / 6)), 'Choosing rates on validation recordings.')
  }
}

function metricsOf(metrics: FitMetrics, { joints }: FitInput, outputStd: readonly number[]): StoredMetrics {
  const perJoint = (rmse: readonly number[]): StoredJointMetric[] =>
    joints.map(({ name, unit }, j) => ({ joint: name, rmse: rmse[j], unit }))
  const errorOf = (rmse: readonly number[]) => rmse.reduce((sum, value, j) => sum + (value / outputStd[j]) ** 2, 0) / rmse.length
  return {
    error: metrics.heldOutError,
    perJoint: perJoint(metrics.rmse),
    recordings: metrics.motions.map(({ name, rmse }) => ({ name, error: errorOf(rmse), perJoint: perJoint(rmse) })),
  }
}

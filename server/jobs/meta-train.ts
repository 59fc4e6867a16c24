import { createKernels } from '../../shared/dynamics/kernels/kernels.ts'
import { createKernelMetaGradient } from '../../shared/dynamics/kernels/meta-gradient.ts'
import { createKernelNextBatch } from '../../shared/dynamics/kernels-next-batch.ts'
import type { LossVersion } from '../../shared/dynamics/loss-version.ts'
import type { ChainShape } from '../../shared/dynamics/meta-gradient.ts'
import {
  defaultMetaTrainingOptions,
  metaTrain,
  type MetaTrainingProgress,
  type MetaTrainingResult,
} from '../../shared/dynamics/meta-training.ts'
import { normaliseMotion } from '../../shared/dynamics/motion.ts'
import { decodeVersion } from '../../shared/dynamics/version.ts'
import type { StoredComparison } from '../models/loss-version.ts'
import type { JobInput, JobOutput, JobReport } from './worker-messages.ts'

type MetaTrainInput = JobInput & { kind: 'meta_train' }

/** Shares of the job's progress: rates of the rivals, outer updates, and the rest for the learned loss's own rate. */
const RATES_SHARE = 0.1
const UPDATES_SHARE = 0.85

/** The job `meta_train`: a learned loss, compared on validation recordings with everything tuned there alike. */
export function runMetaTrain(input: MetaTrainInput, report: JobReport): JobOutput {
  const { parameters, lossKind } = input
  const { description, parameters: theta } = decodeVersion(input.base)
  const normalised = (motions: MetaTrainInput['training']) =>
    motions.map((motion) => normaliseMotion(motion, description.normalisation))
  const kernels = createKernels()
  const steps = metaTrain(
    { network: description.network, parameters: Float64Array.from(theta) },
    normalised(input.training),
    normalised(input.validation),
    {
      ...defaultMetaTrainingOptions,
      scheme: parameters.scheme,
      loss: lossKind,
      positive: parameters.positive,
      hidden: parameters.hidden,
      updates: parameters.updates,
      innerSteps: parameters.innerSteps,
      streams: parameters.streams,
      rowsPerStep: parameters.rowsPerStep,
      seed: parameters.seed,
      ...(parameters.scheme !== 'bias' && {
        createMetaGradient: (shape: ChainShape) => createKernelMetaGradient(kernels, shape),
      }),
      measure: createKernelNextBatch(kernels),
    },
  )
  let tried = 0
  for (;;) {
    report.throwIfCancelled()
    const { done, value } = steps.next()
    if (done) return outputOf(value, input)
    if (value.phase === 'rates') tried += 1
    tell(value, tried, report)
  }
}

function tell(at: MetaTrainingProgress, tried: number, report: JobReport): void {
  if (at.phase === 'rates') {
    report.progress(
      RATES_SHARE * (1 - 1 / (1 + tried / 8)),
      `Choosing the rate of ${at.name}: ${at.rate.toPrecision(3)} gives ${at.error.toPrecision(3)}.`,
    )
    return
  }
  const { update, updates, outer, validation } = at
  if (Number.isFinite(outer)) report.point('outer error', update, outer)
  if (validation !== undefined && Number.isFinite(validation)) report.point('validation', update, validation)
  report.progress(
    RATES_SHARE + ((UPDATES_SHARE - RATES_SHARE) * update) / updates,
    `Update ${update} of ${updates}: outer error ${outer.toPrecision(3)}.`,
  )
}

function outputOf(
  { learned, none, rivals }: MetaTrainingResult,
  { baseChecksum, lossKind, parameters }: MetaTrainInput,
): JobOutput {
  const { rule } = learned
  const artefact: LossVersion = {
    description: {
      kind: lossKind,
      positive: rule.lossShape.positive,
      joints: rule.lossShape.joints,
      hidden: lossKind === 'structured' ? 0 : rule.lossShape.hidden,
      baseChecksum,
      scheme: parameters.scheme,
      update: {
        kind: rule.update,
        rate: rule.rate,
        rowsPerStep: rule.rowsPerStep,
        fade: fadeOf(parameters.scheme, rule.fadingRate),
      },
    },
    parameters: Float32Array.from(rule.lossParameters),
  }
  const validation: StoredComparison[] = [
    { name: 'none', error: none },
    ...rivals.map(({ name, error, rule: { rate } }) => ({ name, error, rate })),
    { name: learned.name, error: learned.error, rate: rule.rate },
  ]
  // A rival that diverged at every rate has no finite error to tell.
  return { kind: 'meta_train', artefact, validation: validation.filter(({ error }) => Number.isFinite(error)) }
}

/** What is left of a bias after a second, where one fades. */
function fadeOf(scheme: string, fadingRate: number): number {
  return scheme === 'bias' ? Math.exp(-fadingRate) : 1
}

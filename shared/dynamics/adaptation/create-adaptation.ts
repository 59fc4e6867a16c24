import type { Kernels } from '../kernels/kernels.ts'
import { createRowPredictor } from '../prediction.ts'
import type { RowPredictor, PredictQuery, Prediction } from '../prediction.ts'
import { checkLength, checkRows, ShapeError } from '../shape-error.ts'
import { checkVersion } from '../version.ts'
import type {
  Adaptation,
  AdaptationInputs,
  AdaptationState,
  AdaptationStatus,
  BatchEntry,
  BatchOutcome,
  ChangeOutcome,
  CommandEntry,
  EventEntry,
  LogEntry,
  Outcome,
  Reason,
  Refusal,
  Snapshot,
} from './adaptation.ts'
import { createBiasLearner } from './bias-learner.ts'
import { ByteReader, Bytes } from './bytes.ts'
import { checkCommand, checkSequence, checkTimes } from './entry-checks.ts'
import { createGuardTable, judgePlausibility, mostExceeding, reasons, worseJoint } from './guards.ts'
import type { GuardTable } from './guards.ts'
import type { Learned, Learner, LearnerFactory, Rows } from './learner.ts'
import { createNetworkLearner } from './network-learner.ts'
import { createRows, createScales, fillRows } from './rows.ts'
import type { Scales } from './rows.ts'
import { HOLD_OUT_ROWS, MOST_BATCH_ROWS, STEP_NORM_REST } from './settings.ts'
import type { Scheme } from './settings.ts'
import { BatchWindow } from './window.ts'

/** All schemes by their name in the contract. To add one: a file with a LearnerFactory, its name in Scheme, one line here. */
const learners: Readonly<Record<Scheme, LearnerFactory>> = {
  all: createNetworkLearner,
  last_layer: createNetworkLearner,
  bias: createBiasLearner,
}

const MARK = 0x31435748

/** A moment of an adaptation. Never changed once it stands in the queue. NaN stands for "none yet" in times. */
interface State {
  revision: number
  nextSequence: number
  mode: AdaptationState
  learned: Learned
  /** The newest one that a whole second of unseen rows has shown to be no worse than base. */
  lastGood: Learned
  /** Time of the newest row in the log. */
  lastTime: number
  /** Sample period, s. */
  period: number
  /** The step-norm bound rests for rows before this time. */
  restUntil: number
  rejections: number
  /** First and next line of the window. */
  windowStart: number
  windowEnd: number
  /** Time of the first row, and the first line, whose errors may count: what was served before is no longer served. */
  errorsSince: number
  errorsFrom: number
}

/**
 * A new adaptation at revision 0, serving the base version.
 *
 * @param kernels  of this process or worker; the adaptation holds memory of theirs until release
 * @throws {ShapeError} parts do not fit each other
 */
export function createAdaptation(kernels: Kernels, inputs: AdaptationInputs): Adaptation {
  return new Machine(kernels, inputs)
}

/**
 * An adaptation as it stood when the checkpoint was taken. With the entries after it, it reaches the identical bits.
 *
 * @throws {RangeError} the bytes are no checkpoint of an adaptation with these inputs
 */
export function restoreAdaptation(kernels: Kernels, inputs: AdaptationInputs, checkpoint: Uint8Array): Adaptation {
  const machine = new Machine(kernels, inputs)
  try {
    machine.restore(checkpoint)
  } catch (error) {
    machine.release()
    throw error
  }
  return machine
}

class Machine implements Adaptation {
  readonly inputs: AdaptationInputs
  readonly #joints: number
  readonly #learner: Learner
  readonly #predictor: RowPredictor
  readonly #scales: Scales
  readonly #guard: GuardTable
  readonly #window: BatchWindow
  readonly #queue: State[] = []
  #published: State
  #tip: State

  // Work areas of prepare, overwritten by every batch.
  readonly #rows: Rows
  #served = new Float64Array(0)
  #base = new Float64Array(0)
  #candidate = new Float64Array(0)
  readonly #sums: { served: Float64Array; base: Float64Array; candidate: Float64Array; motion: Float64Array }

  constructor(kernels: Kernels, inputs: AdaptationInputs) {
    const { version, settings, limits, jointNames, units, loss } = inputs
    checkVersion(version)
    const { joints, normalisation } = version.description
    checkLength('jointNames', jointNames.length, joints, `${joints} joints`)
    checkLength('units', units.length, joints, `${joints} joints`)
    if (loss !== 'mse' && loss.description.joints !== joints) {
      throw new ShapeError(`The loss is for ${loss.description.joints} joints, the version for ${joints}.`)
    }
    this.inputs = inputs
    this.#joints = joints
    this.#scales = createScales(normalisation)
    this.#predictor = createRowPredictor(kernels, version, limits)
    this.#learner = learners[settings.scheme](kernels, inputs)
    this.#window = new BatchWindow(joints)
    this.#rows = createRows(kernels, joints)
    this.#guard = createGuardTable(inputs)
    const perJoint = () => new Float64Array(joints)
    this.#sums = { served: perJoint(), base: perJoint(), candidate: perJoint(), motion: perJoint() }
    const { base } = this.#learner
    this.#published = this.#tip = {
      revision: 0,
      nextSequence: 1,
      mode: { state: 'adapting' },
      learned: keep(base),
      lastGood: keep(base),
      lastTime: NaN,
      period: NaN,
      restUntil: -Infinity,
      rejections: 0,
      windowStart: 0,
      windowEnd: 0,
      errorsSince: NaN,
      errorsFrom: 0,
    }
  }

  get inFlight(): number {
    return this.#queue.length
  }

  status(): AdaptationStatus {
    return statusOf(this.#published, this.inputs.settings.horizon)
  }

  tip(): AdaptationStatus {
    return statusOf(this.#tip, this.inputs.settings.horizon)
  }

  check(entry: LogEntry): Refusal | null {
    const { mode, nextSequence, lastTime } = this.#tip
    if (mode.state === 'ended') return { code: 'ended', detail: `The adaptation has ended: ${mode.reason}` }
    if (entry.kind === 'command') return checkCommand(entry, mode)
    return checkSequence(entry, nextSequence) ?? (entry.kind === 'batch' ? checkTimes(entry, lastTime) : null)
  }

  prepare(entry: LogEntry): Outcome {
    const refusal = this.check(entry)
    if (refusal) throw new RangeError(refusal.detail)
    if (entry.kind === 'batch') this.#checkShapes(entry)
    const next = { ...this.#tip }
    keep(next.learned)
    keep(next.lastGood)
    if (entry.kind !== 'command') next.nextSequence = entry.sequence + 1
    const outcome =
      entry.kind === 'batch'
        ? this.#batch(entry, next)
        : entry.kind === 'event'
          ? this.#event(entry, next)
          : this.#command(entry, next)
    this.#queue.push(next)
    this.#tip = next
    return outcome
  }

  publish(): void {
    const next = this.#queue.shift()
    if (!next) throw new RangeError('Nothing is prepared: publish serves what prepare has computed.')
    this.#drop(this.#published)
    this.#published = next
  }

  discard(): void {
    for (const state of this.#queue) this.#drop(state)
    this.#queue.length = 0
    this.#tip = this.#published
  }

  predict(query: PredictQuery, ahead: Float64Array | null, into: Prediction): void {
    const { network, bias } = this.#published.learned
    const fading = bias && { values: bias, fade: this.inputs.settings.update.fade }
    this.#predictor.predict(network, query, into, fading, ahead)
  }

  snapshot(): Snapshot {
    const { asOf, validUntil, revision } = this.status()
    const { network, bias } = this.#published.learned
    return {
      revision,
      asOf,
      validUntil,
      parameters: network.read(),
      bias: bias && { values: bias.slice(), fade: this.inputs.settings.update.fade },
    }
  }

  release(): void {
    this.#learner.release()
    this.#predictor.release()
    this.#rows.handle.free()
  }

  checkpoint(): Uint8Array {
    const state = this.#published
    const bytes = new Bytes()
    bytes.uint32(MARK)
    bytes.uint32(this.#joints)
    bytes.text(this.inputs.settings.scheme)
    bytes.text(JSON.stringify(state.mode))
    for (const value of [
      state.revision,
      state.nextSequence,
      state.lastTime,
      state.period,
      state.restUntil,
      state.rejections,
      state.errorsSince,
      state.errorsFrom - state.windowStart,
    ])
      bytes.float64(value)
    this.#writeLearned(state.learned, null, bytes)
    this.#writeLearned(state.lastGood, state.learned, bytes)
    const lines = this.#window.copy(state.windowStart, state.windowEnd)
    bytes.uint32(lines.length)
    bytes.float64s(lines)
    return bytes.finish()
  }

  /** Takes over a checkpoint; only on a machine that has prepared nothing. */
  restore(checkpoint: Uint8Array): void {
    const bytes = new ByteReader(checkpoint)
    const { scheme } = this.inputs.settings
    if (bytes.uint32() !== MARK || bytes.uint32() !== this.#joints || bytes.text() !== scheme) {
      throw new RangeError(`These bytes are no checkpoint of an adaptation of ${this.#joints} joints with scheme ${scheme}.`)
    }
    const state = this.#published
    state.mode = JSON.parse(bytes.text())
    state.revision = bytes.float64()
    state.nextSequence = bytes.float64()
    state.lastTime = bytes.float64()
    state.period = bytes.float64()
    state.restUntil = bytes.float64()
    state.rejections = bytes.float64()
    state.errorsSince = bytes.float64()
    state.errorsFrom = bytes.float64()
    this.#replace(state, 'learned', this.#readLearned(bytes, null))
    this.#replace(state, 'lastGood', this.#readLearned(bytes, state.learned))
    const lines = new Float64Array(bytes.uint32())
    bytes.float64s(lines)
    state.windowEnd = this.#window.restore(lines)
    if (!bytes.isAtEnd) throw new RangeError('These bytes go on after the checkpoint.')
  }

  #checkShapes({ rows, time, position, velocity, acceleration, torque }: BatchEntry): void {
    checkRows(rows, MOST_BATCH_ROWS)
    checkLength('time', time.length, rows, `${rows} rows`)
    for (const [what, values] of [
      ['position', position],
      ['velocity', velocity],
      ['acceleration', acceleration],
      ['torque', torque],
    ] as const) {
      checkLength(what, values.length, rows * this.#joints, `${rows} rows of ${this.#joints} joints`)
    }
  }

  #batch(entry: BatchEntry, next: State): BatchOutcome {
    const { rows } = entry
    const joints = this.#joints
    const { served: servedSums, base: baseSums, motion } = this.#sums
    const from = this.#tip.learned
    this.#makeRoom(rows * joints)
    fillRows(entry, this.#scales, this.#rows)
    this.#learner.predict(from, this.#rows, 0, rows, this.#served)
    this.#sumErrors(this.#served, 0, rows, servedSums)
    const before = meanOf(servedSums, rows)
    const isFinite = before < Infinity

    const now = entry.time[rows - 1]
    const pause = this.#longestPause(entry, next)
    const isSmall = rows < HOLD_OUT_ROWS
    this.#sumMotion(rows, motion)
    if (isSmall) {
      this.#learner.predict(this.#learner.base, this.#rows, 0, rows, this.#base)
      this.#sumErrors(this.#base, 0, rows, baseSums)
    }
    const errorRows = isSmall && isFinite ? rows : 0
    if (isFinite) this.#enterWindow(next, entry.time[0], now, errorRows, rows)
    next.lastTime = now

    const outcome: Writable<BatchOutcome> = {
      kind: 'batch',
      sequence: entry.sequence,
      revision: next.revision,
      verdict: 'stored',
      reasons: [],
      before: isFinite ? before : Number.MAX_VALUE,
      after: null,
      jointBefore: this.#rootMeans(servedSums, rows),
      jointAfter: null,
      weights: new Float64Array(joints),
      stepNorm: null,
      changedTo: null,
    }
    if (isFinite) this.#learner.weights(from, this.#rows, outcome.weights)
    else outcome.weights.fill(1)
    this.#judge(entry, next, outcome, { isFinite, isSmall, pause })
    outcome.revision = next.revision
    return outcome
  }

  /** The order of the checks decides served bits: frozen, gap, finite, plausible, worse than base, motion, noise, step. */
  #judge(
    entry: BatchEntry,
    next: State,
    outcome: Writable<BatchOutcome>,
    given: { isFinite: boolean; isSmall: boolean; pause: number },
  ): void {
    const { settings } = this.#guard
    const { mode } = this.#tip
    if (mode.state === 'frozen') return void (outcome.reasons = [reasons.frozen(mode.reason)])
    const longest = settings.gapPeriods * this.#tipPeriod(next)
    if (given.pause > longest) return void (outcome.reasons = [reasons.gap(given.pause, longest)])
    if (!given.isFinite) return this.#reject(next, outcome, [reasons.notFinite('The prediction error')])
    // Base where it is known anyway: a served state gone wrong must not make good torque look wrong.
    const predicted = given.isSmall ? this.#base : this.#served
    const implausible = judgePlausibility(this.#guard, entry.torque, predicted, entry.rows, this.#scales.outputMean)
    if (implausible) {
      next.windowEnd--
      return this.#reject(next, outcome, [implausible])
    }
    const isProven = given.isSmall && this.#window.isFull(next.errorsSince, next.lastTime)
    if (isProven) {
      const worse = this.#judgeWindow(entry, next)
      if (worse) {
        this.#serveLastGood(next)
        return this.#reject(next, outcome, [worse])
      }
    }
    const idle = this.#judgeMotion(next) ?? this.#judgeNoise(entry.rows)
    if (idle) return void (outcome.reasons = [idle])
    this.#step(entry, next, outcome, isProven)
  }

  #step({ rows, time }: BatchEntry, next: State, outcome: Writable<BatchOutcome>, isProven: boolean): void {
    const from = this.#tip.learned
    const trained = rows < HOLD_OUT_ROWS ? rows : rows - Math.floor(rows / 4)
    const candidate = keep(this.#learner.take())
    this.#learner.learn(from, this.#rows, trained, candidate)
    this.#learner.predict(candidate, this.#rows, 0, rows, this.#candidate)
    this.#sumErrors(this.#candidate, 0, rows, this.#sums.candidate)
    outcome.stepNorm = finiteOrMost(this.#learner.distance(candidate, from))
    outcome.after = finiteOrMost(meanOf(this.#sums.candidate, rows))
    outcome.jointAfter = this.#rootMeans(this.#sums.candidate, rows)
    const broken = this.#judgeCandidate(candidate, from, outcome.stepNorm, time[0] < next.restUntil)
    if (broken.length === 0 && trained < rows) this.#judgeHeldOut(trained, rows, broken)
    if (broken.length > 0) {
      this.#letGo(candidate)
      // What this batch measured may be wrong: it does not count when the served state is judged.
      next.windowEnd--
      return this.#reject(next, outcome, broken)
    }
    this.#learner.age(candidate, time[rows - 1])
    this.#replace(next, 'learned', candidate)
    next.revision++
    outcome.verdict = 'accepted'
    if (trained < rows) this.#replace(next, 'lastGood', keep(candidate))
    if (trained < rows || isProven) next.rejections = 0
  }

  #judgeCandidate(candidate: Learned, from: Learned, stepNorm: number, normRests: boolean): Reason[] {
    const { settings, torqueChange, drift, outputStd } = this.#guard
    let sum = 0
    for (let k = 0; k < candidate.reference.length; k++) sum += candidate.reference[k]
    if (!(stepNorm < Number.MAX_VALUE) || sum - sum !== 0) return [reasons.notFinite('The step')]
    const found: Reason[] = []
    if (!normRests && stepNorm > settings.stepNorm) found.push(reasons.stepNorm(stepNorm, settings.stepNorm))
    const changed = mostExceeding(candidate.reference, from.reference, torqueChange)
    if (changed >= 0) {
      const joint = changed % this.#joints
      const by = Math.abs(candidate.reference[changed] - from.reference[changed]) * outputStd[joint]
      found.push(reasons.torqueChange(this.#guard, joint, by))
    }
    const { reference } = this.#learner.base
    const drifted = mostExceeding(candidate.reference, reference, drift)
    if (drifted >= 0) {
      const joint = drifted % this.#joints
      found.push(
        reasons.drift(this.#guard, joint, Math.abs(candidate.reference[drifted] - reference[drifted]) * outputStd[joint]),
      )
    }
    return found
  }

  /** Candidate against what is served and against base, on the rows it did not see. */
  #judgeHeldOut(from: number, rows: number, found: Reason[]): void {
    const { served, base, candidate } = this.#sums
    const count = rows - from
    this.#sumErrors(this.#served, from, rows, served)
    this.#sumErrors(this.#candidate, from, rows, candidate)
    const before = meanOf(served, count)
    const after = meanOf(candidate, count)
    if (!(after < before)) found.push(reasons.noHelp(finiteOrMost(after), before))
    this.#learner.predict(this.#learner.base, this.#rows, from, rows, this.#base)
    this.#sumErrors(this.#base, from, rows, base)
    const joint = worseJoint(this.#guard, { served: candidate, base, rows: count })
    if (joint >= 0) {
      const std = this.#guard.outputStd[joint]
      found.push(
        reasons.worseThanBase(
          this.#guard,
          joint,
          std * Math.sqrt(candidate[joint] / count),
          std * Math.sqrt(base[joint] / count),
          'on the newest quarter, which the step did not see,',
        ),
      )
    }
  }

  /** Served against base over the last second; a served state that passes, also on this batch alone, is the last good one. */
  #judgeWindow({ rows }: BatchEntry, next: State): Reason | null {
    const { outputStd } = this.#guard
    const sums = this.#window.sum(next.windowStart, next.windowEnd, next.errorsFrom)
    if (sums.rows === 0) return null
    const newest = { served: this.#sums.served, base: this.#sums.base, rows }
    const joint = worseJoint(this.#guard, sums, newest)
    if (joint >= 0) {
      const rmse = (sum: number) => outputStd[joint] * Math.sqrt(sum / sums.rows)
      return reasons.worseThanBase(this.#guard, joint, rmse(sums.served[joint]), rmse(sums.base[joint]), 'over the last second')
    }
    const isGood = worseJoint(this.#guard, sums) < 0 && worseJoint(this.#guard, newest) < 0
    if (isGood && next.lastGood !== next.learned) this.#replace(next, 'lastGood', keep(next.learned))
    return null
  }

  /** Serves the last good state again, or base where this batch shows the last good one to be worse than base too. */
  #serveLastGood(next: State): void {
    const { base } = this.#learner
    const { rows } = this.#rows
    const { candidate, base: baseSums } = this.#sums
    let { lastGood } = next
    if (lastGood !== base) {
      for (const [learned, out, sums] of [
        [lastGood, this.#candidate, candidate],
        [base, this.#base, baseSums],
      ] as const) {
        this.#learner.predict(learned, this.#rows, 0, rows, out)
        this.#sumErrors(out, 0, rows, sums)
      }
      if (worseJoint(this.#guard, { served: candidate, base: baseSums, rows }) >= 0) lastGood = base
    }
    this.#serveAgain(next, lastGood)
  }

  /** A new revision that serves an earlier state, its update starting afresh, judged from here on. */
  #serveAgain(next: State, earlier: Learned): void {
    const { base } = this.#learner
    if (earlier === base) {
      this.#replace(next, 'learned', keep(base))
    } else {
      const again = keep(this.#learner.take())
      this.#learner.restart(earlier, again)
      this.#replace(next, 'learned', again)
    }
    this.#replace(next, 'lastGood', keep(next.learned))
    next.revision++
    forgetErrors(next)
  }

  #judgeMotion(next: State): Reason | null {
    if (this.inputs.settings.scheme === 'bias') return null
    const { motion, movedRows } = this.#window.sum(next.windowStart, next.windowEnd, next.errorsFrom)
    let most = 0
    for (let j = 1; j < motion.length; j++) if (motion[j] > motion[most]) most = j
    const found = Math.sqrt(motion[most] / movedRows)
    return found < this.#guard.settings.excitation ? reasons.excitation(this.#guard, most, found) : null
  }

  #judgeNoise(rows: number): Reason | null {
    const { noiseSquared } = this.#guard
    let sum = 0
    for (let j = 0; j < noiseSquared.length; j++) sum += this.#sums.served[j] / (rows * noiseSquared[j])
    const ratio = Math.sqrt(sum / noiseSquared.length)
    return ratio < 1 ? reasons.belowNoise(ratio) : null
  }

  #reject(next: State, outcome: Writable<BatchOutcome>, why: Reason[]): void {
    outcome.verdict = 'rejected'
    outcome.reasons = why
    next.rejections++
    if (next.rejections >= this.#guard.settings.rejectionsBeforeFreeze) {
      // A frozen state is served for long: it must be one that has shown itself good.
      if (next.learned !== next.lastGood) this.#serveLastGood(next)
      next.mode = {
        state: 'frozen',
        cause: 'rejections',
        reason: `${next.rejections} batches in a row were rejected, the last because: ${why[0].detail}`,
      }
      outcome.changedTo = next.mode
    }
  }

  #event({ sequence, time, event }: EventEntry, next: State): ChangeOutcome {
    const { base } = this.#learner
    const before = next.mode
    forgetErrors(next)
    if (event === 'gripped' || event === 'released') {
      next.restUntil = time + STEP_NORM_REST
    } else {
      // A restart may set the clock back and zeroes torque sensors; another tool is another context. Neither bias nor, with
      // another tool, anything learned survives it.
      const keepsNetwork = event === 'restarted' && this.inputs.settings.scheme !== 'bias'
      if (next.learned !== base) {
        this.#serveAgain(next, keepsNetwork ? next.learned : base)
        if (next.learned !== base) next.learned.asOf = NaN
        this.#replace(next, 'lastGood', keep(base))
      }
      next.restUntil = -Infinity
    }
    if (event === 'restarted') {
      next.lastTime = next.period = NaN
      next.windowStart = next.windowEnd
    }
    if (event === 'tool_changed') {
      next.mode = {
        state: 'frozen',
        cause: 'context_changed',
        reason: 'The tool was changed, which is another context: end this adaptation and start one for the new tool.',
      }
    }
    return { kind: 'event', sequence, revision: next.revision, changedTo: next.mode === before ? null : next.mode }
  }

  #command({ command, reason }: CommandEntry, next: State): ChangeOutcome {
    const before = next.mode
    if (command === 'freeze' && before.state === 'adapting') next.mode = { state: 'frozen', cause: 'command', reason }
    if (command === 'resume') {
      next.mode = { state: 'adapting' }
      next.rejections = 0
      forgetErrors(next)
    }
    if (command === 'reset') {
      next.rejections = 0
      this.#serveAgain(next, this.#learner.base)
    }
    if (command === 'end') next.mode = { state: 'ended', reason }
    return { kind: 'command', sequence: null, revision: next.revision, changedTo: next.mode === before ? null : next.mode }
  }

  /** Longest pause before or within the batch, s; also learns the sample period. */
  #longestPause({ rows, time }: BatchEntry, next: State): number {
    const first = time[0] - next.lastTime
    let longest = first > 0 ? first : 0
    if (rows > 1) {
      const pauses = new Float64Array(rows - 1)
      for (let row = 1; row < rows; row++) {
        pauses[row - 1] = time[row] - time[row - 1]
        if (pauses[row - 1] > longest) longest = pauses[row - 1]
      }
      next.period = pauses.sort()[Math.floor((rows - 1) / 2)]
    } else if (first > 0) {
      // Single rows: a running mean that a pause may at most double, so that one gap does not hide the next.
      next.period = next.period > 0 ? next.period + (Math.min(first, 2 * next.period) - next.period) / 8 : first
    }
    return longest
  }

  /** Rows sent singly are compared with the period known before them. */
  #tipPeriod(next: State): number {
    return this.#rows.rows === 1 && this.#tip.period > 0 ? this.#tip.period : next.period > 0 ? next.period : Infinity
  }

  #enterWindow(next: State, first: number, now: number, errorRows: number, rows: number): void {
    const { served, base, motion } = this.#sums
    if (!(next.errorsSince <= first)) next.errorsSince = first
    this.#window.write(this.#published.windowStart, next.windowEnd, now, errorRows, served, base, rows, motion)
    next.windowEnd++
    next.windowStart = this.#window.firstYoung(next.windowStart, next.windowEnd, now)
  }

  /** Sums of squared errors of rows from..to per joint, base standard deviations. */
  #sumErrors(predicted: Float64Array, from: number, to: number, out: Float64Array): void {
    const { measured } = this.#rows
    const joints = this.#joints
    out.fill(0)
    for (let row = from, k = from * joints; row < to; row++) {
      for (let j = 0; j < joints; j++, k++) {
        const e = measured[k] - predicted[k]
        out[j] += e * e
      }
    }
  }

  /** Sums of squared normalised velocity, centred on rest. */
  #sumMotion(rows: number, out: Float64Array): void {
    const joints = this.#joints
    const { x } = this.#rows
    const { inputMean, inputStd } = this.#scales
    out.fill(0)
    for (let row = 0; row < rows; row++) {
      const v = row * 3 * joints + joints
      for (let j = 0; j < joints; j++) {
        const moved = x[v + j] + inputMean[joints + j] / inputStd[joints + j]
        out[j] += moved * moved
      }
    }
  }

  /** Root mean square errors in N·m (N). */
  #rootMeans(sums: Float64Array, rows: number): Float64Array {
    const { outputStd } = this.#scales
    const roots = new Float64Array(this.#joints)
    for (let j = 0; j < roots.length; j++) roots[j] = finiteOrMost(outputStd[j] * Math.sqrt(sums[j] / rows))
    return roots
  }

  #makeRoom(values: number): void {
    if (this.#served.length >= values) return
    this.#served = new Float64Array(values)
    this.#base = new Float64Array(values)
    this.#candidate = new Float64Array(values)
  }

  #replace(state: State, what: 'learned' | 'lastGood', by: Learned): void {
    const before = state[what]
    state[what] = by
    this.#letGo(before)
  }

  #drop(state: State): void {
    this.#letGo(state.learned)
    this.#letGo(state.lastGood)
  }

  #letGo(learned: Learned): void {
    if (--learned.uses === 0) this.#learner.giveBack(learned)
  }

  #writeLearned(learned: Learned, same: Learned | null, bytes: Bytes): void {
    const which = learned === this.#learner.base ? BASE : learned === same ? SAME : OWN
    bytes.uint32(which)
    if (which === OWN) this.#learner.write(learned, bytes)
  }

  #readLearned(bytes: ByteReader, same: Learned | null): Learned {
    const which = bytes.uint32()
    if (which === BASE) return keep(this.#learner.base)
    if (which === SAME && same) return keep(same)
    if (which !== OWN) throw new RangeError('These bytes are no checkpoint of an adaptation.')
    const learned = keep(this.#learner.take())
    this.#learner.read(bytes, learned)
    return learned
  }
}

const BASE = 0
const OWN = 1
const SAME = 2

type Writable<T> = { -readonly [K in keyof T]: T[K] }

function keep(learned: Learned): Learned {
  learned.uses++
  return learned
}

/** Errors are judged from the next batch on; motion before it still counts. */
function forgetErrors(state: State): void {
  state.errorsSince = NaN
  state.errorsFrom = state.windowEnd
}

function meanOf(sums: Float64Array, rows: number): number {
  let sum = 0
  for (let j = 0; j < sums.length; j++) sum += sums[j]
  return sum / (rows * sums.length)
}

/** JSON has no Infinity and no NaN; what overflowed reads as the largest double. */
function finiteOrMost(value: number): number {
  return value < Number.MAX_VALUE ? value : Number.MAX_VALUE
}

function statusOf(state: State, horizon: number): AdaptationStatus {
  const { asOf } = state.learned
  const isKnown = asOf === asOf
  return {
    revision: state.revision,
    nextSequence: state.nextSequence,
    state: state.mode,
    asOf: isKnown ? asOf : null,
    validUntil: isKnown ? asOf + horizon : null,
    rejectionsInARow: state.rejections,
  }
}

import type { Response } from 'express'
import type { Prediction } from '../../../shared/dynamics/index.ts'
import type { AdaptedArm, BatchResult, ServedState } from '../../services/adaptations/index.ts'
import { ShapedArray } from './cbor-reader.ts'
import { CborWriter, writeCbor } from './cbor-writer.ts'
import { contentType } from './formats.ts'
import type { Format } from './formats.ts'
import type { JointOrder } from './joint-order.ts'
import { JsonWriter } from './json-writer.ts'

/** Whose prediction an answer holds; one object per version, so that what is the same in every answer is written once. */
export interface Predicted {
  readonly model: string
  readonly version: number
  readonly arm: { readonly jointNames: readonly string[]; readonly units: readonly string[] }
}

const writer = new JsonWriter()
const cbor = new CborWriter(65536)
const beginnings = { json: new WeakMap<Predicted, Beginnings>(), cbor: new WeakMap<Predicted, Beginnings>() }
type Beginnings = WeakMap<JointOrder, Uint8Array>
const afterTorque = Buffer.from(',"limited":')
const afterLimited = Buffer.from(',"coverage":')

/** Answers a predict, adapted or not; columns in the order in which the request named its joints. */
export function answerPrediction(
  res: Response, format: Format, of: Predicted, joints: JointOrder, rows: number, prediction: Prediction, state?: ServedState,
): void {
  send(res, format, format === 'json'
    ? predictionJson(of, joints, rows, prediction, state)
    : predictionCbor(of, joints, rows, prediction, state))
}

function predictionJson(of: Predicted, joints: JointOrder, rows: number, prediction: Prediction, state?: ServedState): string {
  const n = of.arm.jointNames.length
  writer.clear()
  writer.bytes(beginningOf('json', of, joints))
  writer.matrix(prediction.torque, rows, n, joints.order)
  writer.bytes(afterTorque)
  writer.pairs(limitedPairs(prediction, joints), prediction.limitedCount)
  writer.bytes(afterLimited)
  writer.numbers(prediction.coverage, rows)
  if (state !== undefined) {
    // Times are to the last digit: six of them would blur a robot's clock.
    const { record, revision, asOf, validUntil } = state
    writer.raw(`,"adaptation":"${record.id}","revision":${revision},"as_of":${asOf},"valid_until":${validUntil}`)
  }
  writer.raw('}')
  return writer.take()
}

/** What comes before the torques; in CBOR without the head of the map, which counts the keys. */
function beginningOf(format: Format, of: Predicted, joints: JointOrder): Uint8Array {
  let known = beginnings[format].get(of)
  if (known === undefined) beginnings[format].set(of, (known = new WeakMap()))
  let bytes = known.get(joints)
  if (bytes === undefined) {
    const head = { model: of.model, version: of.version, joint_names: joints.names, unit: inOrder(of.arm.units, joints) }
    bytes = format === 'json' ? Buffer.from(`${JSON.stringify(head).slice(0, -1)},"torque":`) : writeCbor(head).subarray(1)
    known.set(joints, bytes)
  }
  return bytes
}

/** Torques and coverage of the answer being written, as binary32; grow, and are used again. */
let single = new Float32Array(8192)

function predictionCbor(of: Predicted, joints: JointOrder, rows: number, prediction: Prediction, state?: ServedState): string {
  const n = of.arm.jointNames.length
  const size = rows * n
  if (size > single.length) single = new Float32Array(2 * size)
  cbor.clear()
  cbor.map(state === undefined ? 7 : 11)
  cbor.raw(beginningOf('cbor', of, joints))
  copyInOrder(prediction.torque, size, n, joints.order, single)
  cbor.item('torque')
  cbor.item(new ShapedArray([rows, n], single.subarray(0, size)))
  cbor.item('limited')
  const pairs = limitedPairs(prediction, joints)
  cbor.array(prediction.limitedCount)
  for (let k = 0; k < prediction.limitedCount; k++) {
    cbor.array(2)
    cbor.item(pairs[2 * k])
    cbor.item(pairs[2 * k + 1])
  }
  single.set(prediction.coverage.subarray(0, rows))
  cbor.item('coverage')
  cbor.item(single.subarray(0, rows))
  if (state !== undefined) {
    const { record, revision, asOf, validUntil } = state
    for (const part of ['adaptation', record.id, 'revision', revision, 'as_of', asOf, 'valid_until', validUntil]) cbor.item(part)
  }
  return cbor.take()
}

function copyInOrder(values: Float64Array, size: number, n: number, order: Int32Array | null, into: Float32Array): void {
  if (order === null) return into.set(values.subarray(0, size))
  for (let at = 0; at < size; at += n) for (let k = 0; k < n; k++) into[at + k] = values[at + order[k]]
}

/** Pairs row, joint, with the joint's place among the request's names. */
function limitedPairs({ limited, limitedCount }: Prediction, { order }: JointOrder): Int32Array {
  if (order === null || limitedCount === 0) return limited
  const pairs = limited.slice(0, 2 * limitedCount)
  for (let k = 1; k < pairs.length; k += 2) pairs[k] = order.indexOf(pairs[k])
  return pairs
}

function inOrder<T>(values: ArrayLike<T>, { order }: JointOrder): T[] {
  return order === null ? Array.from(values) : Array.from(order, (joint) => values[joint])
}

/** Answers a batch, joints in the order in which the request named them. */
export function answerBatch(res: Response, format: Format, result: BatchResult, arm: AdaptedArm, joints: JointOrder): void {
  const text = batchJson(result, arm, joints)
  send(res, format, format === 'json' ? text : writeCbor(JSON.parse(Buffer.from(text, 'latin1').toString())).toString('latin1'))
}

function batchJson(result: BatchResult, { jointNames }: AdaptedArm, joints: JointOrder): string {
  const { revision, verdict, reasons, before, after, weights, stepNorm } = result
  const jointBefore = inOrder(result.jointBefore, joints)
  const jointAfter = result.jointAfter && inOrder(result.jointAfter, joints)
  writer.clear()
  writer.raw(`{"revision":${revision},"verdict":"${verdict}","reasons":[`)
  reasons.forEach(({ code, detail, joint, found, bound }, k) => {
    writer.raw(`${k > 0 ? ',' : ''}{"code":"${code}","detail":${JSON.stringify(detail)}`)
    if (joint !== null) writer.raw(`,"joint":${JSON.stringify(jointNames[joint])}`)
    numberField(',"found":', found)
    numberField(',"bound":', bound)
    writer.raw('}')
  })
  writer.raw('],"error":{"before":')
  writer.number(before)
  writer.raw(',"after":')
  numberOrNull(after)
  writer.raw(',"per_joint":[')
  jointBefore.forEach((value, k) => {
    writer.raw(k > 0 ? ',{"before":' : '{"before":')
    writer.number(value)
    writer.raw(',"after":')
    numberOrNull(jointAfter && jointAfter[k])
    writer.raw('}')
  })
  writer.raw(']},"weights":')
  writer.numbers(inOrder(weights, joints))
  writer.raw(',"step_norm":')
  numberOrNull(stepNorm)
  writer.raw('}')
  return writer.take()
}

function numberField(name: string, value: number | null): void {
  if (value === null) return
  writer.raw(name)
  writer.number(value)
}

function numberOrNull(value: number | null): void {
  if (value === null) writer.raw('null')
  else writer.number(value)
}

/** The bytes go as a Latin-1 text, one character each: Node then writes head and body with one system call instead of two. */
function send(res: Response, format: Format, bytes: string): void {
  res.setHeader('Content-Type', contentType(format))
  res.setHeader('Content-Length', bytes.length)
  res.end(bytes, 'latin1')
}

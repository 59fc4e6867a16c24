import { Refusal } from '../../../shared/contract/problems.ts'
import { ShapedArray } from './cbor-reader.ts'
import { Faults, shown } from './faults.ts'
import { readJointOrder } from './joint-order.ts'
import type { JointOrder, RequestArm } from './joint-order.ts'
import { readMatrix, readPerRow, rowsOf } from './numbers.ts'

// Validation of the hot routes, by hand because a schema validator costs more there than everything else together.
// tests/api/predict.test.ts holds it against openapi.yaml.

export const mostPredictRows = 4096
export const mostBatchRows = 1024

const predictFields = new Set(['joints', 'joint_names', 'position', 'velocity', 'acceleration', 'time', 'version'])
const adaptedFields = new Set(['joints', 'joint_names', 'position', 'velocity', 'acceleration', 'time', 'ahead', 'min_revision'])
const batchFields = new Set([
  'joints', 'joint_names', 'sequence', 'skipped', 'time', 'position', 'velocity', 'acceleration', 'acceleration_kind', 'torque',
])
const accelerationKinds = ['measured', 'desired', 'filtered'] as const

export type Body = Record<string, unknown>

/** States to predict for, in the arm's joint order; arrays hold until the next request is read. */
export interface ReadStates {
  readonly joints: JointOrder
  readonly rows: number
  readonly position: Float64Array
  readonly velocity: Float64Array
  readonly acceleration: Float64Array
  readonly time: Float64Array | null
}

export interface ReadBatch {
  readonly joints: JointOrder
  readonly sequence: number
  readonly skipped: number
  readonly accelerationKind: (typeof accelerationKinds)[number]
  readonly rows: number
  /** time (rows), then position, velocity, acceleration, torque (rows × n each, the arm's joint order) in one block. */
  readonly numbers: Float64Array
}

/** @throws {Refusal} malformed-body: the body is no object */
export function bodyObject(body: unknown): Body {
  if (typeof body === 'object' && body !== null && !Array.isArray(body) && !(body instanceof ShapedArray) && !ArrayBuffer.isView(body)) {
    return body as Body
  }
  throw new Refusal('invalid-request', `The body is ${shown(body)}, expected an object.`, {
    errors: [{ pointer: '', detail: `The body is ${shown(body)}, expected an object.` }],
  })
}

/** The version a predict names; undefined for the live one. @throws {Refusal} */
export function readVersionNumber(body: Body): number | undefined {
  const { version } = body
  if (version === undefined) return undefined
  if (typeof version === 'number' && Number.isInteger(version) && version >= 1 && version <= 2147483647) return version
  const detail = `version is ${shown(version)}, expected a whole number from 1. Leave it out for the live version.`
  throw new Refusal('invalid-request', detail, { errors: [{ pointer: '/version', detail }] })
}

/** @throws {Refusal} invalid-request, wrong-joints, time-not-rising, body-too-large */
export function readPredict(body: Body, arm: RequestArm, room: StatesRoom): ReadStates {
  const faults = new Faults()
  checkFields(body, predictFields, faults)
  const states = readStates(body, arm, room, faults)
  faults.refuse()
  return states as ReadStates
}

/** @throws {Refusal} as readPredict */
export function readAdaptedPredict(
  body: Body, arm: RequestArm, room: StatesRoom,
): ReadStates & { readonly ahead: Float64Array | null; readonly minRevision: number } {
  const faults = new Faults()
  checkFields(body, adaptedFields, faults)
  const states = readStates(body, arm, room, faults)
  const minRevision = readCount(body, 'min_revision', 0, Number.MAX_SAFE_INTEGER, faults, 0)
  let ahead: Float64Array | null = null
  if (states !== null && body.ahead !== undefined) {
    ahead = room.ahead.subarray(0, states.rows)
    readPerRow('ahead', body.ahead, states.rows, ahead, faults, { least: 0 })
  }
  faults.refuse()
  return { ...(states as ReadStates), ahead, minRevision }
}

/** @throws {Refusal} as readPredict */
export function readBatch(body: Body, arm: RequestArm): ReadBatch {
  const faults = new Faults()
  checkFields(body, batchFields, faults)
  const joints = readJointOrder(body, arm, faults)
  const sequence = readCount(body, 'sequence', 1, Number.MAX_SAFE_INTEGER, faults)
  const skipped = readCount(body, 'skipped', 0, 1e9, faults, 0)
  const accelerationKind = body.acceleration_kind as ReadBatch['accelerationKind']
  if (!accelerationKinds.includes(accelerationKind)) {
    faults.add({ pointer: '/acceleration_kind', detail: `acceleration_kind is ${shown(accelerationKind)}, expected measured, desired or filtered.` })
  }
  const rows = readRows(body, mostBatchRows, faults)
  if (joints === null || rows === null) {
    faults.refuse()
    throw new Error('Joints or rows are missing without a fault.')
  }
  const size = rows * joints.names.length
  const numbers = new Float64Array(rows + 4 * size)
  readPerRow('time', body.time, rows, numbers.subarray(0, rows), faults, { rising: true })
  matrixNames.concat('torque').forEach((name, k) => {
    const at = rows + k * size
    readMatrix(name, body[name], rows, joints, numbers.subarray(at, at + size), faults)
  })
  faults.refuse()
  return { joints, sequence, skipped, accelerationKind, rows, numbers }
}

const matrixNames = ['position', 'velocity', 'acceleration']

/** Where the states of a predict are read to; one serves one request at a time. */
export class StatesRoom {
  position = new Float64Array(0)
  velocity = new Float64Array(0)
  acceleration = new Float64Array(0)
  readonly time = new Float64Array(mostPredictRows)
  readonly ahead = new Float64Array(mostPredictRows)

  reserve(size: number): void {
    if (size <= this.position.length) return
    this.position = new Float64Array(size)
    this.velocity = new Float64Array(size)
    this.acceleration = new Float64Array(size)
  }
}

function readStates(body: Body, arm: RequestArm, room: StatesRoom, faults: Faults): ReadStates | null {
  const joints = readJointOrder(body, arm, faults)
  const rows = readRows(body, mostPredictRows, faults)
  if (joints === null || rows === null) return null
  const size = rows * joints.names.length
  room.reserve(size)
  const position = room.position.subarray(0, size)
  const velocity = room.velocity.subarray(0, size)
  const acceleration = room.acceleration.subarray(0, size)
  readMatrix('position', body.position, rows, joints, position, faults)
  readMatrix('velocity', body.velocity, rows, joints, velocity, faults)
  readMatrix('acceleration', body.acceleration, rows, joints, acceleration, faults)
  let time: Float64Array | null = null
  if (body.time !== undefined) {
    time = room.time.subarray(0, rows)
    readPerRow('time', body.time, rows, time, faults, { rising: true })
  }
  return { joints, rows, position, velocity, acceleration, time }
}

function checkFields(body: Body, known: ReadonlySet<string>, faults: Faults): void {
  for (const name in body) {
    if (known.has(name)) continue
    const escaped = name.slice(0, 60).replaceAll('~', '~0').replaceAll('/', '~1')
    faults.add({ pointer: `/${escaped}`, detail: `${shown(name)} is no field of this request. Its fields are ${[...known].join(', ')}.` })
  }
}

/** @throws {Refusal} body-too-large: more rows than one request may have */
function readRows(body: Body, most: number, faults: Faults): number | null {
  const rows = rowsOf(body.position)
  if (rows === null || rows === 0) {
    const found = rows === 0 ? 'empty' : body.position === undefined ? 'missing' : shown(body.position)
    faults.add({ pointer: '/position', detail: `position is ${found}, expected an array of at least one row, or in CBOR a typed array with its dimensions (tag 40).` })
    return null
  }
  if (rows > most) {
    const detail = `position has ${rows} rows, at most ${most} go into one request. Send them in several.`
    throw new Refusal('body-too-large', detail, { errors: [{ pointer: '/position', detail }] })
  }
  return rows
}

function readCount(body: Body, name: string, least: number, most: number, faults: Faults, fallback?: number): number {
  const value = body[name]
  if (value === undefined && fallback !== undefined) return fallback
  if (typeof value === 'number' && Number.isInteger(value) && value >= least && value <= most) return value
  const found = value === undefined ? 'missing' : shown(value)
  faults.add({ pointer: `/${name}`, detail: `${name} is ${found}, expected a whole number from ${least}${most < 2 ** 53 - 1 ? ` to ${most}` : ''}.` })
  return least
}

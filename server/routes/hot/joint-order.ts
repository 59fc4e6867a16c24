import { shown } from './faults.ts'
import type { Faults } from './faults.ts'

/** What reading a request needs to know of its arm. */
export interface RequestArm {
  readonly name: string
  readonly jointNames: readonly string[]
  readonly fingerprint: string
}

/** Whose columns a request's matrices hold. */
export interface JointOrder {
  readonly names: readonly string[]
  /** Column k is the arm's joint order[k]; null: the arm's own order. */
  readonly order: Int32Array | null
}

/** Requests of one client name their joints the same way again and again. */
const remembered = new WeakMap<RequestArm, Map<string, JointOrder>>()
const mostRemembered = 64

/** Reads `joints` or `joint_names`; null after adding a fault. */
export function readJointOrder(body: Record<string, unknown>, arm: RequestArm, faults: Faults): JointOrder | null {
  const { joints, joint_names: names } = body
  if (joints === undefined && names === undefined) {
    faults.add({ pointer: '', detail: `The request says not whose columns it holds. Send joint_names, or joints with arm "${arm.name}"'s fingerprint ${arm.fingerprint}.` })
    return null
  }
  if (joints !== undefined && names !== undefined) {
    faults.add({ pointer: '/joints', detail: 'Both joints and joint_names were sent. Send one of them.' })
    return null
  }
  return joints !== undefined ? readFingerprint(joints, arm, faults) : readNames(names, arm, faults)
}

function orders(arm: RequestArm): Map<string, JointOrder> {
  let known = remembered.get(arm)
  if (known === undefined) remembered.set(arm, (known = new Map([['', { names: arm.jointNames, order: null }]])))
  return known
}

function readFingerprint(joints: unknown, arm: RequestArm, faults: Faults): JointOrder | null {
  if (joints === arm.fingerprint) return orders(arm).get('') ?? null
  if (typeof joints !== 'string' || !/^[0-9a-f]{12}$/.test(joints)) {
    faults.add({ pointer: '/joints', detail: `joints is ${shown(joints)}, expected the 12 hex digits that GET /v1/arms states as joints_fingerprint.` })
  } else {
    faults.add({ pointer: '/joints', detail: `joints is ${joints}, but arm "${arm.name}" has ${arm.fingerprint}: its joints or their order are others. Get /v1/arms again.` }, 'wrong-joints')
  }
  return null
}

function readNames(names: unknown, arm: RequestArm, faults: Faults): JointOrder | null {
  if (!Array.isArray(names) || names.length === 0 || names.length > 64) {
    faults.add({ pointer: '/joint_names', detail: `joint_names is ${shown(names)}, expected an array of the ${arm.jointNames.length} names of arm "${arm.name}".` })
    return null
  }
  const known = orders(arm)
  const key = allTexts(names) ? names.join('\n') : ''
  const found = key === '' ? undefined : known.get(key)
  if (found !== undefined && found.names.length === names.length) return found
  if (!checkNames(names, arm, faults)) return null
  const order = Int32Array.from(names, (name) => arm.jointNames.indexOf(name))
  const result = { names: names as string[], order: order.every((joint, k) => joint === k) ? null : order }
  if (known.size < mostRemembered) known.set(key, result)
  return result
}

function allTexts(names: unknown[]): names is string[] {
  for (let k = 0; k < names.length; k++) if (typeof names[k] !== 'string') return false
  return true
}

function checkNames(names: unknown[], arm: RequestArm, faults: Faults): names is string[] {
  const seen = new Set<string>()
  let sound = true
  const wrong = (k: number, detail: string, slug?: 'wrong-joints') => {
    sound = false
    faults.add({ pointer: `/joint_names/${k}`, detail, ...(slug && typeof names[k] === 'string' ? { joint: names[k] } : {}) }, slug)
  }
  names.forEach((name, k) => {
    if (typeof name !== 'string' || name.length < 1 || name.length > 120) {
      wrong(k, `joint_names: entry ${k} is ${shown(name)}, expected a joint's name.`)
    } else if (!arm.jointNames.includes(name)) {
      wrong(k, `joint_names: arm "${arm.name}" has no joint ${shown(name)}. Its joints are ${arm.jointNames.join(', ')}.`, 'wrong-joints')
    } else if (seen.has(name)) {
      wrong(k, `joint_names: "${name}" comes twice. Name every joint of arm "${arm.name}" once.`, 'wrong-joints')
    } else {
      seen.add(name)
    }
  })
  const missing = arm.jointNames.filter((name) => !seen.has(name))
  if (sound && missing.length > 0) {
    sound = false
    faults.add({ pointer: '/joint_names', joint: missing[0], detail: `joint_names: ${missing.join(', ')} of arm "${arm.name}" missing. Name every joint once.` }, 'wrong-joints')
  }
  return sound
}

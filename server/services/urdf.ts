import {
  IDENTITY,
  compose,
  inertialFaults,
  inertialFromParameters,
  inertialParameters,
  multiplyRotations,
  transpose,
} from '../../shared/dynamics/rigid-body/index.ts'
import type {
  ChainDescription,
  ChainJoint,
  Inertial,
  InertialFault,
  JointKind,
  Matrix3,
  Placement,
  Vector3,
} from '../../shared/dynamics/rigid-body/index.ts'
import { readUrdf, UrdfError } from './urdf-reader.ts'
import type { UrdfInertial, UrdfJoint, UrdfRobot } from './urdf-reader.ts'

export { MOST_URDF_BYTES, UrdfError } from './urdf-reader.ts'

/** Which part of the robot is the arm, and how it hangs. */
export interface ChainChoice {
  /** Link that does not move; the tree's root unless named. */
  readonly base?: string
  /** Link that carries the tool; the last link unless named, needed where the tree has several ends. */
  readonly tip?: string
  /** m/s² in the base link's frame; (0, 0, −9.81) unless given. */
  readonly gravity?: Vector3
}

/** A joint's limits as the file states them; undefined where it does not, or states a number that cannot be. */
export interface ImportedJoint {
  readonly name: string
  readonly kind: JointKind
  readonly lower: number | undefined
  readonly upper: number | undefined
  readonly velocity: number | undefined
  readonly torque: number | undefined
}

/** Something about the file that a person should know. */
export interface UrdfFinding {
  /** `inconsistent`: no body can be so; `missing`: to be filled in by hand; `left_out`: in the file, not in the arm. */
  readonly kind: 'inconsistent' | 'missing' | 'left_out'
  /** The link or joint it is about. */
  readonly subject: string
  readonly rule: InertialFault['rule'] | 'torque_limit' | 'velocity_limit' | 'position_limits' | 'inertial' | 'branch'
  readonly message: string
}

export interface ImportedArm {
  readonly name: string
  readonly base: string
  readonly tip: string
  readonly chain: ChainDescription
  readonly joints: readonly ImportedJoint[]
  /** Empty when nothing is missing and every body can exist. */
  readonly findings: readonly UrdfFinding[]
}

/**
 * The chain between two links of a URDF. Fixed joints are folded in: what hangs on a link by fixed joints becomes part of
 * its body, and fixed joints along the chain part of the next joint's offset, or of the flange.
 *
 * @throws {UrdfError} the file cannot be read, the two links are not connected, or a joint between them cannot be used
 */
export function importUrdf(text: string, choice: ChainChoice = {}): ImportedArm {
  const robot = readUrdf(text)
  const tree = treeOf(robot)
  const base = choice.base ?? tree.root
  const tip = choice.tip ?? onlyEnd(robot, tree, base)
  const path = pathBetween(robot, tree, base, tip)
  const findings: UrdfFinding[] = []
  const joints: ChainJoint[] = []
  let along: Placement = { position: [0, 0, 0], rotation: IDENTITY }
  path.forEach((joint, k) => {
    along = compose(along, joint.placement)
    if (joint.type === 'fixed') return
    // The body that moves with this joint: its child, and everything fixed to that, up to the next joint of the chain.
    const next = path.slice(k + 1).find(({ type }) => type !== 'fixed')
    joints.push({
      name: joint.name,
      kind: joint.type as JointKind,
      offset: along,
      axis: joint.axis,
      inertial: bodyOf(robot, tree, joint.child, next, findings),
    })
    along = { position: [0, 0, 0], rotation: IDENTITY }
  })
  if (joints.length === 0) throw new UrdfError([`Between "${base}" and "${tip}" no joint moves. Choose other links.`])
  const moving = path.filter(({ type }) => type !== 'fixed')
  return {
    name: robot.name,
    base,
    tip,
    chain: { joints, gravity: choice.gravity ?? [0, 0, -9.81], flange: along },
    joints: moving.map((joint) => limitsOf(joint, findings)),
    findings,
  }
}

interface Tree {
  readonly root: string
  /** By child link. */
  readonly above: ReadonlyMap<string, UrdfJoint>
  /** By parent link. */
  readonly below: ReadonlyMap<string, readonly UrdfJoint[]>
}

function treeOf({ links, joints }: UrdfRobot): Tree {
  const above = new Map<string, UrdfJoint>()
  const below = new Map<string, UrdfJoint[]>()
  const faults: string[] = []
  for (const joint of joints) {
    for (const link of [joint.parent, joint.child]) {
      if (!links.has(link)) faults.push(`joint "${joint.name}": there is no link "${link}".`)
    }
    const other = above.get(joint.child)
    if (other)
      faults.push(
        `link "${joint.child}" hangs on two joints, "${other.name}" and "${joint.name}": closed loops cannot be described.`,
      )
    above.set(joint.child, joint)
    below.set(joint.parent, [...(below.get(joint.parent) ?? []), joint])
  }
  const roots = [...links.keys()].filter((name) => !above.has(name))
  if (faults.length === 0 && roots.length !== 1) {
    faults.push(
      roots.length === 0
        ? 'Every link hangs on another: the joints form a loop.'
        : `The links ${list(roots)} hang on nothing: expected one root.`,
    )
  }
  if (faults.length > 0) throw new UrdfError(faults)
  return { root: roots[0], above, below }
}

/** The end of the tree below a link, when movable joints lead to one place only. */
function onlyEnd({ links }: UrdfRobot, { below }: Tree, base: string): string {
  if (!links.has(base)) throw new UrdfError([`There is no link "${base}".`])
  let end = base
  for (;;) {
    const joints = below.get(end) ?? []
    const moving = joints.filter((joint) => joint.type !== 'fixed' || leadsToMotion(below, joint.child))
    const onward = moving.length > 0 ? moving : joints
    if (onward.length === 0) return end
    if (onward.length > 1) {
      throw new UrdfError([
        `At link "${end}" the robot branches to ${list(onward.map(({ child }) => child))}. Say which link carries the tool.`,
      ])
    }
    end = onward[0].child
  }
}

function leadsToMotion(below: Tree['below'], link: string): boolean {
  return (below.get(link) ?? []).some((joint) => joint.type !== 'fixed' || leadsToMotion(below, joint.child))
}

function pathBetween({ links }: UrdfRobot, { above }: Tree, base: string, tip: string): UrdfJoint[] {
  for (const link of [base, tip]) if (!links.has(link)) throw new UrdfError([`There is no link "${link}".`])
  const path: UrdfJoint[] = []
  // A loop apart from the root would never end: no path is longer than there are links.
  for (let link = tip; link !== base && path.length <= links.size; link = path[0].parent) {
    const joint = above.get(link)
    if (joint === undefined) throw new UrdfError([`Link "${tip}" does not hang on "${base}". Choose a base nearer to the root.`])
    path.unshift(joint)
  }
  const faults = path.flatMap((joint) => {
    if (joint.mimics !== undefined) {
      return [
        `joint "${joint.name}" mimics "${joint.mimics}": coupled joints cannot be described. Choose a tip before it.`,
      ]
    }
    if (joint.type === 'floating' || joint.type === 'planar') {
      return [
        `joint "${joint.name}" is ${joint.type}: an arm has no such joint. Choose a base after it.`,
      ]
    }
    return joint.type !== 'fixed' && joint.axis.every((value) => value === 0) ? [`joint "${joint.name}": axis is 0 0 0.`] : []
  })
  if (faults.length > 0) throw new UrdfError(faults)
  return path
}

/** Everything that moves as one with a link, in the link's frame. The chain's next joint is not followed. */
function bodyOf(robot: UrdfRobot, { below }: Tree, link: string, next: UrdfJoint | undefined, findings: UrdfFinding[]): Inertial {
  const sum = new Float64Array(10)
  const visit = (name: string, placement: Placement): void => {
    const part = robot.links.get(name)!.inertial
    if (part) {
      const isSound = report(name, part, findings)
      // A part that cannot be stays out of the sum only where it would undo it.
      if (isSound || part.inertial.mass > 0) addParameters(sum, part, placement)
    }
    for (const joint of below.get(name) ?? []) {
      if (joint === next) continue
      if (joint.type === 'fixed') visit(joint.child, compose(placement, joint.placement))
      else {
        findings.push({
          kind: 'left_out',
          subject: joint.child,
          rule: 'branch',
          message: `link "${joint.child}" moves by "${joint.name}" beside the chain and is left out. Declare it as payload.`,
        })
      }
    }
  }
  visit(link, { position: [0, 0, 0], rotation: IDENTITY })
  if (sum[0] > 0) return inertialFromParameters(sum)
  findings.push({
    kind: 'missing',
    subject: link,
    rule: 'inertial',
    message: `link "${link}" has no mass, nor has anything fixed to it: give its inertial parameters.`,
  })
  return { mass: 0, centerOfMass: [0, 0, 0], inertia: [0, 0, 0, 0, 0, 0] }
}

function report(link: string, { inertial }: UrdfInertial, findings: UrdfFinding[]): boolean {
  const faults = inertialFaults(inertial)
  for (const { rule, message } of faults)
    findings.push({ kind: 'inconsistent', subject: link, rule, message: `link "${link}": ${message}.` })
  return faults.length === 0
}

function addParameters(sum: Float64Array, { placement: own, inertial }: UrdfInertial, link: Placement): void {
  const { position, rotation } = compose(link, own)
  const parameters = inertialParameters({
    mass: inertial.mass,
    centerOfMass: position,
    inertia: turned(rotation, inertial.inertia),
  })
  for (let k = 0; k < sum.length; k++) sum[k] += parameters[k]
}

// R · I · Rᵀ
function turned(rotation: Matrix3, [xx, xy, xz, yy, yz, zz]: Inertial['inertia']): Inertial['inertia'] {
  const m = multiplyRotations(multiplyRotations(rotation, [xx, xy, xz, xy, yy, yz, xz, yz, zz]), transpose(rotation))
  return [m[0], m[1], m[2], m[4], m[5], m[8]]
}

function limitsOf({ name, type, lower, upper, effort, velocity }: UrdfJoint, findings: UrdfFinding[]): ImportedJoint {
  const note = (rule: UrdfFinding['rule'], message: string): void => {
    findings.push({ kind: 'missing', subject: name, rule, message: `joint "${name}": ${message}` })
  }
  const positive = (value: number | undefined, rule: 'torque_limit' | 'velocity_limit', word: string): number | undefined => {
    if (value !== undefined && value > 0) return value
    note(rule, value === undefined ? `no ${word} limit. Fill it in.` : `${word} limit is ${value}, expected above 0. Fill it in.`)
    return undefined
  }
  const torque = positive(effort, 'torque_limit', 'effort')
  const speed = positive(velocity, 'velocity_limit', 'velocity')
  const kind = type as JointKind
  if (kind === 'continuous') return { name, kind, lower: undefined, upper: undefined, velocity: speed, torque }
  const hasRange = lower !== undefined && upper !== undefined && lower < upper
  if (!hasRange)
    note(
      'position_limits',
      `position limits are ${lower ?? 'missing'} to ${upper ?? 'missing'}, expected the lower below the upper. Fill them in.`,
    )
  return { name, kind, lower: hasRange ? lower : undefined, upper: hasRange ? upper : undefined, velocity: speed, torque }
}

function list(names: readonly string[]): string {
  return names.map((name) => `"${name}"`).join(', ')
}

import { XMLParser } from 'fast-xml-parser'
import type { Schemas } from '../wire.ts'

type Element = Record<string, unknown>

/**
 * The robot's name and its movable joints with their limits, in the order of the file. Inertial parameters are passed over.
 *
 * @throws {Error} no URDF, one with a DOCTYPE, or a joint without the limits that an arm needs
 */
export function jointsOfUrdf(text: string): { name: string; joints: Schemas['JointDescription'][] } {
  if (text.length > 1_000_000) throw new Error(`The URDF has ${text.length} characters; at most a million are read.`)
  if (/<!DOCTYPE|<!ENTITY/i.test(text)) throw new Error('The URDF has a DOCTYPE. Remove it; a URDF needs none.')
  const document = new XMLParser({ ignoreAttributes: false, attributeNamePrefix: '', parseAttributeValue: false }).parse(
    text,
  ) as { robot?: Element }
  if (typeof document.robot !== 'object') throw new Error('The outermost element is not <robot>: this is no URDF.')
  const { name, joint } = document.robot
  const joints = [joint ?? []].flat() as Element[]
  return { name: String(name), joints: joints.filter(({ type }) => type !== 'fixed').map(jointOf) }
}

function jointOf(joint: Element): Schemas['JointDescription'] {
  const name = String(joint.name)
  const { type } = joint
  if (type !== 'revolute' && type !== 'continuous' && type !== 'prismatic')
    throw new Error(`Joint ${name} is ${String(type)}; revolute, continuous and prismatic ones are taken.`)
  const limit = (joint.limit ?? {}) as Record<string, string | undefined>
  const number = (key: string) => {
    const value = Number(limit[key] ?? NaN)
    if (!Number.isFinite(value))
      throw new Error(
        `Joint ${name}: <limit ${key}="${limit[key] ?? ''}"> is no number. Every joint needs effort, velocity, lower and upper.`,
      )
    return value
  }
  return {
    name,
    type,
    ...(type !== 'continuous' && { position_lower: number('lower'), position_upper: number('upper') }),
    velocity_limit: number('velocity'),
    torque_limit: number('effort'),
  }
}

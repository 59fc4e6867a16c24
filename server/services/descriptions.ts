import { Refusal } from '../../shared/contract/problems.ts'
import { requireAction, type Caller } from './permissions.ts'
import { readUrdf } from './urdf-reader.ts'
import { importUrdf, UrdfError, type ImportedArm } from './urdf.ts'

export interface DescriptionToInspect {
  readonly urdf: string
  readonly baseLink?: string
  readonly tipLink?: string
}

export interface InspectedDescription {
  readonly arm: ImportedArm
  readonly links: readonly string[]
  /** Links that nothing hangs on. */
  readonly tips: readonly string[]
  /** By joint, the link that it moves. */
  readonly moved: ReadonlyMap<string, string>
}

/** What a URDF says of an arm; nothing is stored. @throws {Refusal} invalid-request */
export function inspectDescription(caller: Caller, { urdf, baseLink, tipLink }: DescriptionToInspect): InspectedDescription {
  requireAction(caller, 'build')
  const robot = refusing(() => readUrdf(urdf))
  const links = [...robot.links.keys()]
  for (const [pointer, name] of [['/base_link', baseLink], ['/tip_link', tipLink]] as const) {
    if (name !== undefined && !robot.links.has(name)) throw refusalOf([`There is no link "${name}".`], pointer)
  }
  const parents = new Set(robot.joints.map(({ parent }) => parent))
  return {
    arm: refusing(() => importUrdf(urdf, { base: baseLink, tip: tipLink })),
    links,
    tips: links.filter((name) => !parents.has(name)),
    moved: new Map(robot.joints.map(({ name, child }) => [name, child])),
  }
}

function refusing<T>(read: () => T): T {
  try {
    return read()
  } catch (error) {
    if (error instanceof UrdfError) throw refusalOf(error.faults, '/urdf')
    throw error
  }
}

function refusalOf(faults: readonly string[], pointer: string): Refusal {
  const more = faults.length > 1 ? ` And ${faults.length - 1} more; each is in "errors".` : ''
  return new Refusal('invalid-request', faults[0] + more, { errors: faults.map((detail) => ({ pointer, detail })) })
}

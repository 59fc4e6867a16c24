import { XMLParser, XMLValidator } from 'fast-xml-parser'
import { IDENTITY, rotationFromRollPitchYaw } from '../../shared/dynamics/rigid-body/index.ts'
import type { Inertial, Placement, Vector3 } from '../../shared/dynamics/rigid-body/index.ts'

/** A URDF that can't be used; `faults` says what, where and what to do, all of them at once where more than one was found. */
export class UrdfError extends Error {
  override readonly name = 'UrdfError'
  readonly faults: readonly string[]

  constructor(faults: readonly string[]) {
    super(faults.join(' '))
    this.faults = faults
  }
}

/** A link's inertial parameters and where their frame sits in the link. */
export interface UrdfInertial {
  readonly placement: Placement
  readonly inertial: Inertial
}

export interface UrdfLink {
  readonly name: string
  readonly inertial: UrdfInertial | undefined
}

export type UrdfJointType = 'revolute' | 'continuous' | 'prismatic' | 'fixed' | 'floating' | 'planar'

/** A joint as the file gives it; a number that is missing there is undefined here. */
export interface UrdfJoint {
  readonly name: string
  readonly type: UrdfJointType
  readonly parent: string
  readonly child: string
  readonly placement: Placement
  readonly axis: Vector3
  readonly lower: number | undefined
  readonly upper: number | undefined
  readonly effort: number | undefined
  readonly velocity: number | undefined
  readonly mimics: string | undefined
}

export interface UrdfRobot {
  readonly name: string
  readonly links: ReadonlyMap<string, UrdfLink>
  readonly joints: readonly UrdfJoint[]
}

/** Bytes of a URDF at most: with meshes by reference, real ones are below 200 kB. */
export const MOST_URDF_BYTES = 1_000_000

// <robot><link><inertial><origin/> is four deep; vendors' extensions go a little further.
const DEEPEST = 30

const jointTypes: readonly string[] = [
  'revolute',
  'continuous',
  'prismatic',
  'fixed',
  'floating',
  'planar',
] satisfies UrdfJointType[]

type Element = Record<string, unknown>

/**
 * Reads links and joints of a URDF. Visuals, collisions, transmissions and extensions are passed over.
 *
 * @throws {UrdfError} too large, not well-formed, with a DOCTYPE, or with an element that lacks what it must have
 * Source: the URDF specification (wiki.ros.org/urdf/XML), with its defaults: origin 0, axis (1, 0, 0).
 */
export function readUrdf(text: string): UrdfRobot {
  const robot = parse(text)
  const faults: string[] = []
  const links = new Map<string, UrdfLink>()
  for (const element of childrenOf(robot, 'link')) {
    attempt(faults, () => {
      const link = readLink(element)
      if (links.has(link.name)) throw new UrdfError([`link "${link.name}" is there twice: names of links must differ.`])
      links.set(link.name, link)
    })
  }
  const joints: UrdfJoint[] = []
  for (const element of childrenOf(robot, 'joint')) attempt(faults, () => joints.push(readJoint(element)))
  if (links.size === 0 && faults.length === 0) faults.push('The robot has no link.')
  const names = joints.map(({ name }) => name)
  names.forEach((name, k) => {
    if (names.indexOf(name) !== k) faults.push(`joint "${name}" is there twice: names of joints must differ.`)
  })
  if (faults.length > 0) throw new UrdfError(faults)
  return { name: String(robot['@name'] ?? ''), links, joints }
}

function parse(text: string): Element {
  const bytes = Buffer.byteLength(text)
  if (bytes > MOST_URDF_BYTES)
    throw new UrdfError([`The file has ${bytes} bytes, at most ${MOST_URDF_BYTES} are read. Leave meshes out; refer to them.`])
  // Before any parser sees it: a document type can define entities that expand without end, or name files.
  if (/<!DOCTYPE|<!ENTITY/i.test(text)) throw new UrdfError(['The file has a DOCTYPE. Remove it; a URDF needs none.'])
  if (/<xacro:|xmlns:xacro/i.test(text)) throw new UrdfError(['The file is a xacro template. Expand it to a URDF first.'])
  const validity = XMLValidator.validate(text)
  if (validity !== true) throw new UrdfError([`line ${validity.err.line}: ${validity.err.msg} The file is not well-formed XML.`])
  let document: Element
  try {
    document = new XMLParser({
      ignoreAttributes: false,
      attributeNamePrefix: '@',
      parseTagValue: false,
      parseAttributeValue: false,
      ignoreDeclaration: true,
      ignorePiTags: true,
      maxNestedTags: DEEPEST,
      isArray: (_name, _path, _isLeaf, isAttribute) => !isAttribute,
    }).parse(text) as Element
  } catch (cause) {
    throw new UrdfError([`The file cannot be read as XML: ${(cause as Error).message}.`])
  }
  const [robot] = childrenOf(document, 'robot')
  if (robot === undefined) throw new UrdfError(['The outermost element is not <robot>: this is no URDF.'])
  return robot
}

function readLink(element: Element): UrdfLink {
  const name = nameOf('link', element)
  const [inertial] = childrenOf(element, 'inertial')
  if (inertial === undefined) return { name, inertial: undefined }
  const what = `link "${name}"`
  const [mass] = childrenOf(inertial, 'mass')
  const [inertia] = childrenOf(inertial, 'inertia')
  if (mass === undefined || inertia === undefined) throw new UrdfError([`${what}: <inertial> needs both <mass> and <inertia>.`])
  const entry = (key: string): number => numberOf(`${what}: inertia`, inertia, key) ?? missing(`${what}: inertia`, key)
  return {
    name,
    inertial: {
      placement: placementOf(what, inertial),
      inertial: {
        mass: numberOf(`${what}: mass`, mass, 'value') ?? missing(`${what}: mass`, 'value'),
        centerOfMass: [0, 0, 0],
        inertia: [entry('ixx'), entry('ixy'), entry('ixz'), entry('iyy'), entry('iyz'), entry('izz')],
      },
    },
  }
}

function readJoint(element: Element): UrdfJoint {
  const name = nameOf('joint', element)
  const what = `joint "${name}"`
  const type = String(element['@type'])
  if (!jointTypes.includes(type))
    throw new UrdfError([`${what}: type is "${shortened(type)}", expected one of ${jointTypes.join(', ')}.`])
  const linkOf = (tag: 'parent' | 'child'): string => {
    const [found] = childrenOf(element, tag)
    if (typeof found?.['@link'] !== 'string') throw new UrdfError([`${what}: <${tag} link="…"/> is missing.`])
    return found['@link']
  }
  const [axis] = childrenOf(element, 'axis')
  const [limit = {}] = childrenOf(element, 'limit')
  const [mimic] = childrenOf(element, 'mimic')
  const limitOf = (key: string): number | undefined => numberOf(`${what}: limit`, limit, key)
  return {
    name,
    type: type as UrdfJointType,
    parent: linkOf('parent'),
    child: linkOf('child'),
    placement: placementOf(what, element),
    axis: axis === undefined ? [1, 0, 0] : (vectorOf(`${what}: axis`, axis, 'xyz') ?? [1, 0, 0]),
    lower: limitOf('lower'),
    upper: limitOf('upper'),
    effort: limitOf('effort'),
    velocity: limitOf('velocity'),
    mimics: mimic === undefined ? undefined : String(mimic['@joint']),
  }
}

function placementOf(what: string, element: Element): Placement {
  const [origin] = childrenOf(element, 'origin')
  if (origin === undefined) return { position: [0, 0, 0], rotation: IDENTITY }
  const angles = vectorOf(`${what}: origin`, origin, 'rpy')
  return {
    position: vectorOf(`${what}: origin`, origin, 'xyz') ?? [0, 0, 0],
    rotation: angles === undefined ? IDENTITY : rotationFromRollPitchYaw(...angles),
  }
}

function childrenOf(element: Element, tag: string): Element[] {
  const found = element[tag]
  if (!Array.isArray(found)) return []
  return found.map((child: unknown) => (typeof child === 'object' && child !== null ? (child as Element) : {}))
}

function nameOf(tag: string, element: Element): string {
  const name = element['@name']
  if (typeof name !== 'string' || name.trim() === '') throw new UrdfError([`A <${tag}> has no name.`])
  return name
}

function vectorOf(what: string, element: Element, key: string): [number, number, number] | undefined {
  const text = element[`@${key}`]
  if (text === undefined) return undefined
  const values = String(text).trim().split(/\s+/).map(toNumber)
  const [x, y, z] = values
  if (values.length !== 3 || x === undefined || y === undefined || z === undefined) {
    throw new UrdfError([`${what}: ${key} is "${shortened(String(text))}", expected three numbers.`])
  }
  return [x, y, z]
}

function numberOf(what: string, element: Element, key: string): number | undefined {
  const text = element[`@${key}`]
  if (text === undefined) return undefined
  const value = toNumber(String(text).trim())
  if (value === undefined) throw new UrdfError([`${what}: ${key} is "${shortened(String(text))}", expected a number.`])
  return value
}

function toNumber(text: string): number | undefined {
  const value = Number(text)
  return text !== '' && Number.isFinite(value) ? value : undefined
}

function missing(what: string, key: string): never {
  throw new UrdfError([`${what}: ${key} is missing.`])
}

function shortened(text: string): string {
  return text.length > 60 ? `${text.slice(0, 60)}…` : text
}

function attempt(faults: string[], read: () => void): void {
  try {
    read()
  } catch (error) {
    if (!(error instanceof UrdfError)) throw error
    faults.push(...error.faults)
  }
}

import { Refusal } from '../../../shared/contract/problems.ts'

/** What reading a recording needs to know of a joint. */
export interface RecordedJoint {
  readonly name: string
  readonly type: 'revolute' | 'continuous' | 'prismatic'
  readonly positionLower?: number
  readonly positionUpper?: number
}

export type Quantity = 'time' | 'position' | 'velocity' | 'acceleration' | 'torque'

/** One column of the file and what it holds; `joint` is an index, -1 for time. */
export interface Column {
  readonly title: string
  readonly quantity: Quantity
  readonly joint: number
}

const jointQuantities = ['position', 'velocity', 'acceleration', 'torque'] as const

/**
 * The columns in the order rows are stored in: time, then position, velocity, acceleration and torque of every joint.
 *
 * @param header  the file's first line
 * @returns per stored value, where in the file it stands
 * @throws {Refusal} recording-unreadable: names every missing, unknown and doubled column
 */
export function placeColumns(
  header: readonly string[],
  joints: readonly RecordedJoint[],
): { places: number[]; columns: Column[] } {
  refuseForeignHeader(header)
  const wanted = storedColumns(joints)
  const placeOf = new Map<string, number>()
  const unknown: string[] = []
  const doubled: string[] = []
  header.forEach((given, place) => {
    const title = given.trim()
    const key = title.startsWith('effort_') ? `torque_${title.slice('effort_'.length)}` : title
    if (!wanted.some((column) => column.title === key)) unknown.push(title)
    else if (placeOf.has(key)) doubled.push(title)
    else placeOf.set(key, place)
  })
  const missing = wanted.filter(({ title }) => !placeOf.has(title)).map(({ title }) => title)
  refuseWithoutAcceleration(missing, joints)
  const faults = [
    ...missing.map((title) => `Column ${title} is missing.`),
    ...unknown.map((title) => `Column "${shortened(title)}" is unknown.`),
    ...doubled.map((title) => `Column ${title} is there twice.`),
  ]
  if (faults.length > 0) {
    throw new Refusal(
      'recording-unreadable',
      `line 1: ${faults.slice(0, 6).join(' ')}${faults.length > 6 ? ` And ${faults.length - 6} more.` : ''} Expected time and, ` +
        `for every joint of the arm, position_<joint>, velocity_<joint>, acceleration_<joint> and torque_<joint> (or ` +
        'effort_<joint>), ' +
        `once each. The arm's joints are ${joints.map(({ name }) => name).join(', ')}.`,
      { errors: faults.slice(0, 50).map((detail) => ({ detail })) },
    )
  }
  const places = wanted.map(({ title }) => placeOf.get(title)!)
  return { places, columns: wanted.map((column, k) => ({ ...column, title: header[places[k]].trim() })) }
}

function storedColumns(joints: readonly RecordedJoint[]): Column[] {
  const perJoint = jointQuantities.flatMap((quantity) =>
    joints.map(({ name }, joint) => ({ title: `${quantity}_${name}`, quantity, joint })),
  )
  return [{ title: 'time', quantity: 'time', joint: -1 }, ...perJoint]
}

function refuseForeignHeader(header: readonly string[]): void {
  if (header.length === 1 && /[;\t]/.test(header[0])) {
    const separator = header[0].includes(';') ? 'semicolons' : 'tabs'
    throw new Refusal(
      'recording-unreadable',
      `line 1: the columns are separated by ${separator}. Export with commas between columns and points in numbers.`,
    )
  }
  if (header.length > 1 && header.every((title) => title.trim() !== '' && Number.isFinite(Number(title)))) {
    throw new Refusal(
      'recording-unreadable',
      'line 1 holds numbers, expected the names of the columns: time, position_<joint>, and so on. Add a header.',
    )
  }
}

/** Joint state messages carry no acceleration, so this is the header most often seen without it. */
function refuseWithoutAcceleration(missing: readonly string[], joints: readonly RecordedJoint[]): void {
  const without = missing.filter((title) => title.startsWith('acceleration_'))
  if (without.length !== joints.length || missing.length !== joints.length) return
  throw new Refusal(
    'recording-unreadable',
    'line 1: there is no acceleration column. Differentiate offline, with the same zero-phase low-pass on position, velocity, ' +
      'acceleration and torque, and add acceleration_<joint> for every joint.',
    { errors: without.map((title) => ({ detail: `Column ${title} is missing.` })) },
  )
}

function shortened(text: string): string {
  return text.length > 80 ? `${text.slice(0, 80)}…` : text
}

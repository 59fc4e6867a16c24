import type { Schemas } from '../wire.ts'

/** One line of a folder's recordings.csv. */
export interface ListedRecording {
  readonly file: string
  readonly use: Schemas['RecordingUse']
  readonly context: Schemas['RecordingContext']
}

const uses: readonly string[] = ['fit', 'meta_train', 'validate', 'evaluate'] satisfies Schemas['RecordingUse'][]

/**
 * Reads recordings.csv: file and use, and where they are known motion, payload_kg, com_x_m, com_y_m and com_z_m (the payload's
 * centre of mass in the flange frame). A payload of 0 kg is none.
 *
 * @throws {Error} a column is missing or a value cannot be read: names line and column
 */
export function readRecordingsTable(text: string): ListedRecording[] {
  const [header, ...lines] = text
    .replace(/^\uFEFF/, '')
    .split(/\r?\n/)
    .filter((line) => line.trim() !== '')
    .map((line) => line.split(',').map((cell) => cell.trim()))
  for (const column of ['file', 'use'])
    if (!header?.includes(column)) throw new Error(`recordings.csv has no column "${column}". It needs file and use.`)
  return lines.map((cells, index) => {
    const where = `recordings.csv, line ${index + 2}`
    if (cells.length !== header.length) throw new Error(`${where} has ${cells.length} values, the header has ${header.length}.`)
    const value = (column: string) => cells[header.indexOf(column)] ?? ''
    const number = (column: string) => {
      const read = value(column) === '' ? NaN : Number(value(column))
      if (!Number.isFinite(read)) throw new Error(`${where}: ${column} is "${value(column)}", expected a number.`)
      return read
    }
    const use = value('use')
    if (!uses.includes(use)) throw new Error(`${where}: use is "${use}", expected ${uses.join(', ')}.`)
    const mass = header.includes('payload_kg') ? number('payload_kg') : 0
    const hasCentre = ['com_x_m', 'com_y_m', 'com_z_m'].every((column) => header.includes(column))
    return {
      file: value('file'),
      use: use as Schemas['RecordingUse'],
      context: {
        ...(value('motion') !== '' && { motion: value('motion') }),
        ...(mass > 0 && {
          payload: { mass, ...(hasCentre && { center_of_mass: [number('com_x_m'), number('com_y_m'), number('com_z_m')] }) },
        }),
      },
    }
  })
}

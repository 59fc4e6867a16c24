import { ShapeError } from './shape-error.ts'

/** A binary blob of text and numbers: what versions and loss versions are stored as. */
export interface Artefact {
  /** Anything that JSON can hold, its keys in the order that the writer fixed. */
  readonly description: object
  /** Named arrays of numbers, each stored as binary32. */
  readonly sections: readonly { readonly name: string; readonly values: Float32Array }[]
}

const HEADER = 8

/**
 * Layout: four ASCII characters of `mark`; length of the text as unsigned 32 bits; the text, JSON in ASCII, padded with
 * blanks to a multiple of 4; the sections one after the other. Numbers are little-endian. Equal artefacts give equal bytes:
 * JSON writes a double as the shortest decimal that reads back as the same double.
 *
 * @param mark  four ASCII characters: what kind of artefact, and the format's number
 * @throws {ShapeError} a section holds a number that is not finite
 */
export function encodeArtefact(mark: string, { description, sections }: Artefact): Uint8Array {
  const text = asciiJson({ sections: sections.map(({ name, values }) => [name, values.length]), description })
  const textLength = Math.ceil(text.length / 4) * 4
  const bytes = new Uint8Array(HEADER + textLength + 4 * sections.reduce((sum, { values }) => sum + values.length, 0))
  const view = new DataView(bytes.buffer)
  for (let k = 0; k < 4; k++) bytes[k] = mark.charCodeAt(k)
  view.setUint32(4, textLength, true)
  for (let k = 0; k < textLength; k++) bytes[HEADER + k] = k < text.length ? text.charCodeAt(k) : 32
  let at = HEADER + textLength
  for (const { name, values } of sections) {
    for (let k = 0; k < values.length; k++, at += 4) {
      if (!Number.isFinite(values[k]))
        throw new ShapeError(`${name}: value ${k} is ${values[k]}, only finite numbers are stored.`)
      view.setFloat32(at, values[k], true)
    }
  }
  return bytes
}

/**
 * Reads what encodeArtefact wrote.
 *
 * @param what  name for messages: `version`
 * @param sectionNames  the sections the reader knows; others mean a newer format
 * @throws {RangeError} the bytes are something else, cut short, or of a newer format
 */
export function decodeArtefact(what: string, mark: string, sectionNames: readonly string[], bytes: Uint8Array): Artefact {
  const view = new DataView(bytes.buffer, bytes.byteOffset, bytes.byteLength)
  const found = bytes.length < HEADER ? '' : String.fromCharCode(...bytes.subarray(0, 4))
  if (found !== mark) throw new RangeError(`These ${bytes.length} bytes are no ${what}: they do not begin with ${mark}.`)
  const textLength = view.getUint32(4, true)
  if (HEADER + textLength > bytes.length) throw new RangeError(`This ${what} is cut short: its text has ${textLength} bytes.`)
  const header = parseHeader(what, bytes.subarray(HEADER, HEADER + textLength))
  const total = header.sections.reduce((sum, [, length]) => sum + length, 0)
  if (HEADER + textLength + 4 * total !== bytes.length) {
    throw new RangeError(`This ${what} has ${bytes.length} bytes, its text announces ${HEADER + textLength + 4 * total}.`)
  }
  let at = HEADER + textLength
  const sections = header.sections.map(([name, length]) => {
    if (!sectionNames.includes(name)) throw new RangeError(`This ${what} has a part "${name}" that this program does not know.`)
    const values = new Float32Array(length)
    for (let k = 0; k < length; k++, at += 4) values[k] = view.getFloat32(at, true)
    return { name, values }
  })
  return { description: header.description, sections }
}

function parseHeader(what: string, text: Uint8Array): { sections: [string, number][]; description: object } {
  let json = ''
  for (let k = 0; k < text.length; k++) json += String.fromCharCode(text[k])
  try {
    const header = JSON.parse(json)
    const lengths = header.sections.every(
      ([name, length]: [unknown, unknown]) => typeof name === 'string' && Number.isInteger(length),
    )
    if (lengths && typeof header.description === 'object' && header.description !== null) return header
  } catch (cause) {
    throw new RangeError(`The text of this ${what} cannot be read.`, { cause })
  }
  throw new RangeError(`The text of this ${what} lacks its sections or its description.`)
}

function asciiJson(value: object): string {
  return JSON.stringify(value).replace(
    /[\u007f-\uffff]/g,
    character => `\\u${character.charCodeAt(0).toString(16).padStart(4, '0')}`,
  )
}

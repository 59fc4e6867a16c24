import type { Readable } from 'node:stream'
import busboy from 'busboy'
import type { Request } from 'express'
import { Refusal } from '../../shared/contract/problems.ts'

/** A multipart form with its fields before its one file. */
export interface UploadForm {
  readonly fields: Readonly<Record<string, string>>
  readonly fileName: string
  /** The file as it arrives. Throws a Refusal when it is too large, breaks off, or something follows it that should not. */
  readonly file: AsyncIterable<Uint8Array>
  /** Call it at the end, whatever became of the file: a sender that reads its refusal only after the last byte must get there. */
  letRunDry(): void
}

const FIELD_BYTES = 16_384
const MOST_FIELDS = 20

/**
 * Reads a form up to its file, and hands the file on as a stream. What is left unread is thrown away as it arrives.
 *
 * @throws {Refusal} malformed-body, invalid-request, upload-incomplete
 */
export async function readUploadForm(req: Request, fileField: string, mostFileBytes: number): Promise<UploadForm> {
  // What is announced as too large need not be read to its limit; fields and boundaries are small.
  if (Number(req.headers['content-length'] ?? 0) > mostFileBytes + MOST_FIELDS * (FIELD_BYTES + 1_000))
    throw tooLarge(mostFileBytes)
  const form = openForm(req, mostFileBytes)
  const fields = Object.create(null) as Record<string, string>
  let late: string | undefined
  let opened = false
  const ended = new Promise<void>((resolve, reject) => {
    form.on('close', resolve)
    form.on('error', (error: Error) => reject(error instanceof Refusal ? error : incomplete(error)))
  })
  ended.catch(() => undefined)

  const file = new Promise<{ stream: Readable & { truncated?: boolean }; name: string }>((resolve, reject) => {
    const refuse = (detail: string) => {
      const refusal = new Refusal('invalid-request', detail)
      form.destroy(refusal)
      reject(refusal)
    }
    form.on('field', (name, value, { nameTruncated, valueTruncated }) => {
      if (opened) late ??= `The field "${shortened(name)}" comes after the file. Send the fields before the file.`
      else if (nameTruncated || valueTruncated) refuse(`The field "${shortened(name)}" is longer than ${FIELD_BYTES} bytes.`)
      else if (Object.hasOwn(fields, name)) refuse(`The field "${shortened(name)}" is there twice. Send it once.`)
      else fields[name] = value
    })
    form.on('file', (name, stream, { filename }) => {
      // When the form is destroyed, so is its file, with an error that is told elsewhere.
      stream.on('error', () => undefined)
      if (opened || name !== fileField) {
        stream.resume()
        const detail = opened
          ? 'There is more than one file. Send one file a request.'
          : `The file is in the part "${shortened(name)}". Name its part "${fileField}".`
        if (opened) late ??= detail
        else refuse(detail)
        return
      }
      opened = true
      resolve({ stream, name: filename ?? '' })
    })
    form.on('fieldsLimit', () => refuse(`The form has more than ${MOST_FIELDS} fields.`))
    ended.then(() => refuse(`The form has no file. Add the part "${fileField}" with a file name, after the fields.`), reject)
  })

  req.on('close', () => {
    if (!req.complete) form.destroy(incomplete(undefined))
  })
  req.pipe(form)
  try {
    const { stream, name } = await file
    return { fields, fileName: name, file: contents(req, form, stream, ended, mostFileBytes, () => late), letRunDry: () => letRunDry(req, form) }
  } catch (error) {
    letRunDry(req, form)
    throw error
  }
}

async function* contents(
  req: Request,
  form: busboy.Busboy,
  stream: Readable & { truncated?: boolean },
  ended: Promise<void>,
  mostBytes: number,
  late: () => string | undefined,
): AsyncGenerator<Uint8Array> {
  let isWhole = false
  try {
    for await (const piece of stream) yield piece as Uint8Array
    if (stream.truncated) throw tooLarge(mostBytes)
    await ended
    const detail = late()
    if (detail !== undefined) throw new Refusal('invalid-request', detail)
    isWhole = true
  } catch (error) {
    throw error instanceof Refusal ? error : incomplete(error)
  } finally {
    if (!isWhole) letRunDry(req, form)
  }
}

function openForm(req: Request, mostFileBytes: number): busboy.Busboy {
  try {
    return busboy({
      headers: req.headers,
      limits: {
        fieldNameSize: 100,
        fieldSize: FIELD_BYTES,
        fields: MOST_FIELDS,
        fileSize: mostFileBytes,
        files: 2,
        headerPairs: 50,
      },
      defParamCharset: 'utf8',
    })
  } catch (error) {
    throw new Refusal(
      'malformed-body',
      `The form cannot be read: ${(error as Error).message}. Send multipart/form-data with its boundary.`,
      { cause: error },
    )
  }
}

function letRunDry(req: Request, form: busboy.Busboy): void {
  req.unpipe(form)
  req.resume()
}

function tooLarge(mostBytes: number): Refusal {
  return new Refusal(
    'body-too-large',
    `The file is larger than ${mostBytes / 1e6} MB, which is the most a recording may have. Cut the log into several.`,
  )
}

function incomplete(cause: unknown): Refusal {
  return new Refusal(
    'upload-incomplete',
    'The upload broke off before the form was whole, and nothing was stored. Send it again.',
    { cause },
  )
}

function shortened(text: string): string {
  return text.length > 60 ? `${text.slice(0, 60)}…` : text
}

import { Router } from 'express'
import { Refusal } from '../../shared/contract/problems.ts'
import type { components } from '../../shared/contract/openapi.generated.ts'
import type { ContractDocument } from '../middleware/contract-document.ts'
import type { Contract } from '../middleware/contract.ts'
import { faultOf } from '../middleware/fault-text.ts'
import { answerPage } from '../middleware/page-answer.ts'
import { readUploadForm } from '../middleware/upload-form.ts'
import type { RecordingContext } from '../models/recording.ts'
import type { Services } from '../services/index.ts'
import type { NewRecording, RecordingRecord } from '../services/recordings/recordings.ts'

type Schemas = components['schemas']

const MOST_FILE_BYTES = 200_000_000

export function recordingRoutes({ recordings }: Services, contract: Contract): Router {
  const router = Router()

  router.get(
    '/v1/recordings',
    contract.handle('listRecordings', async ({ caller, query }, res, req) => {
      const page = await recordings.list(caller, { cursor: query.cursor, limit: query.limit!, arm: query.arm, use: query.use })
      answerPage(req, res, { ...page, items: page.items.map(recordingToWire) })
    }),
  )

  router.post(
    '/v1/recordings',
    contract.handle('createRecording', async ({ caller, requestId }, res, req) => {
      const { fields, fileName, file, letRunDry } = await readUploadForm(req, 'file', MOST_FILE_BYTES)
      try {
        const given = fieldsFromWire(contract.document, fields, fileName)
        const { recording, stored } = await recordings.upload(caller, given, file, requestId)
        if (stored) res.status(201).location(`/v1/recordings/${recording.id}`)
        res.json(recordingToWire(recording))
      } finally {
        letRunDry()
      }
    }),
  )

  router.get(
    '/v1/recordings/:recording',
    contract.handle('getRecording', async ({ caller, path }, res) => {
      res.json(recordingToWire(await recordings.get(caller, path.recording)))
    }),
  )

  router.delete(
    '/v1/recordings/:recording',
    contract.handle('deleteRecording', async ({ caller, path, query, requestId }, res) => {
      await recordings.delete(caller, path.recording, query.reason, requestId)
      res.status(204).end()
    }),
  )

  return router
}

const knownFields = ['arm', 'use', 'name', 'context']

/** @throws {Refusal} invalid-request: a field is missing, unknown or not as the contract says */
function fieldsFromWire(document: ContractDocument, fields: Readonly<Record<string, string>>, fileName: string): NewRecording {
  const unknown = Object.keys(fields).find((name) => !knownFields.includes(name))
  if (unknown !== undefined)
    throw new Refusal(
      'invalid-request',
      `The field "${unknown}" is not known here. Known: ${knownFields.join(', ')}, then the file.`,
    )
  const checked = { ...fields, file: '' }
  refuseFaults('', document.bodyCheck('createRecording', 'multipart/form-data')(checked).map(faultOf))
  const { arm, use, name, context } = checked as unknown as Schemas['NewRecording']
  const isNamed = name !== undefined && name.trim() !== ''
  return {
    arm,
    use,
    name: (isNamed ? name : fileName || 'recording.csv').slice(0, 200),
    context: contextFromWire(document, context),
  }
}

function contextFromWire(document: ContractDocument, text: string | undefined): RecordingContext {
  if (text === undefined || text.trim() === '') return {}
  let context: Schemas['RecordingContext']
  try {
    context = JSON.parse(text) as Schemas['RecordingContext']
  } catch (error) {
    throw new Refusal('invalid-request', `context is not JSON: ${(error as Error).message}.`, {
      errors: [{ pointer: '/context', detail: 'Not JSON.' }],
      cause: error,
    })
  }
  refuseFaults('/context', document.schemaCheck('RecordingContext')(context).map(faultOf))
  const { payload, ...rest } = context
  return {
    ...rest,
    ...(payload && { payload: { mass: payload.mass, ...(payload.center_of_mass && { centerOfMass: payload.center_of_mass }) } }),
  }
}

function refuseFaults(prefix: string, given: ReturnType<typeof faultOf>[]): void {
  if (given.length === 0) return
  const errors = given.map((fault) => ({ ...fault, pointer: prefix + (fault.pointer ?? '') }))
  throw new Refusal('invalid-request', `${errors[0].pointer.slice(1).replaceAll('/', '.')}: ${errors[0].detail}`, { errors })
}

function recordingToWire(recording: RecordingRecord): Schemas['Recording'] {
  const { payload, ...context } = recording.context
  return {
    id: recording.id,
    arm: recording.arm,
    name: recording.name,
    use: recording.use,
    context: { ...context, ...(payload && { payload: { mass: payload.mass, center_of_mass: payload.centerOfMass } }) },
    rows: recording.rows,
    duration: recording.duration,
    rate: recording.rate,
    bytes: recording.bytes,
    checksum: recording.checksum,
    created_at: recording.createdAt.toISOString(),
    created_by: recording.createdBy,
  }
}

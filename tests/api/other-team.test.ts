import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import type { OperationId } from '../../server/middleware/contract-document.ts'
import { contractDocument } from '../support/api.ts'
import type { ApiClient, SessionClient } from '../support/api.ts'
import { csvOf, twoJointArm, twoJointHeader, twoJointRows } from '../support/recording-csv.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer } from '../support/server.ts'
import { smallLoss, smallVersion, lossSnapshot, versionSnapshot } from '../support/versions.ts'

/**
 * One team has one of everything; another asks for each of them by every operation, with requests that would be right if the
 * things were its own. It is told that there is no such thing, not that it may not.
 */
let server: TestServer
let owner: ApiClient
let ownerAdministrator: SessionClient
let stranger: ApiClient
let strangerAdministrator: SessionClient
const named: Record<string, string> = { model: 'tinker-base', arm: 'tinker-2', loss: 'tinker-loss', version: '1', position: '1' }
const jointNames = ['swivel', 'lift']
const version = smallVersion()
let checksum = ''

const rows = (count: number, offset = 0) => Array.from({ length: count }, (_, row) => [0.1 + offset + 0.01 * row, -0.2])
const batch = (sequence: number) => ({
  joint_names: jointNames, sequence, time: [1, 1.02, 1.04, 1.06], position: rows(4), velocity: rows(4, 0.3), acceleration: rows(4, 0.5), acceleration_kind: 'measured', torque: rows(4, 2),
})
const states = { joint_names: jointNames, position: rows(1), velocity: rows(1), acceleration: rows(1) }
const reason = { reason: 'Trying what is not mine.' }

function recordingForm(seed = 1): FormData {
  const form = new FormData()
  form.set('arm', 'tinker-2')
  form.set('use', 'fit')
  form.set('file', new Blob([csvOf(twoJointHeader, twoJointRows({ rows: 120, seed }))], { type: 'text/csv' }), 'own.csv')
  return form
}

/** For every operation that names a thing, in its path or in its body: a request that its owner may make. */
const requests: Partial<Record<OperationId, () => { body?: unknown; query?: string; headers?: Record<string, string> }>> = {
  predict: () => ({ body: states }),
  getVersionSnapshot: () => ({}),
  createAdaptation: () => ({ body: { model: named.model, loss: 'mse', robot: 'bench 1' } }),
  getAdaptation: () => ({}),
  postBatch: () => ({ body: batch(1) }),
  postEvent: () => ({ body: { sequence: 1, time: 1, kind: 'gripped' } }),
  predictAdapted: () => ({ body: states }),
  listAdaptationLog: () => ({}),
  getBatchRows: () => ({}),
  getAdaptationSnapshot: () => ({}),
  freezeAdaptation: () => ({ body: reason }),
  resumeAdaptation: () => ({ body: reason }),
  resetAdaptation: () => ({ body: reason }),
  promoteAdaptation: () => ({ body: reason }),
  endAdaptation: () => ({ query: '?reason=Not%20mine' }),
  getArm: () => ({}),
  archiveArm: () => ({ body: reason }),
  createRecording: () => ({ body: recordingForm() }),
  getRecording: () => ({}),
  deleteRecording: () => ({ query: '?reason=Not%20mine' }),
  createModel: () => ({ body: { name: 'another', arm: named.arm } }),
  getModel: () => ({}),
  archiveModel: () => ({ body: reason }),
  listVersions: () => ({}),
  importVersion: () => ({ body: versionSnapshot(version, jointNames) }),
  getVersion: () => ({}),
  createLoss: () => ({ body: { name: 'another', model: named.model, kind: 'structured' } }),
  getLoss: () => ({}),
  listLossVersions: () => ({}),
  importLossVersion: () => ({ body: lossSnapshot(smallLoss(checksum)) }),
  getLossVersion: () => ({}),
  getLossSnapshot: () => ({}),
  createJob: () => ({ body: { kind: 'fit', model: named.model } }),
  getJob: () => ({}),
  getJobCurve: () => ({}),
  cancelJob: () => ({ body: reason }),
  streamJob: () => ({}),
  listReleases: () => ({}),
  releaseVersion: () => ({ body: { version: 1, ...reason }, headers: { 'if-match': '"1"' } }),
  rollBack: () => ({ body: reason, headers: { 'if-match': '"1"' } }),
  getKey: () => ({}),
  revokeKey: () => ({ body: reason }),
  rotateKey: () => ({ body: {} }),
}

/** These name nothing that a team owns. */
const namesNothing: readonly OperationId[] = [
  'listAdaptations', 'listArms', 'createArm', 'inspectDescription', 'listRecordings', 'listModels', 'listLosses', 'listJobs', 'getSession', 'signIn', 'chooseTeam', 'signOut', 'changePassword',
  'listKeys', 'createKey', 'rotateCurrentKey', 'health', 'readiness', 'contract',
]

beforeAll(async () => {
  server = await startTestServer()
  const [own, other] = [await server.createTeam(), await server.createTeam()]
  const scopes = ['predict', 'adapt', 'read', 'build', 'release'] as const
  owner = await own.createKey(scopes)
  stranger = await other.createKey(scopes)
  ownerAdministrator = await own.signIn('administrator')
  strangerAdministrator = await other.signIn('administrator')

  const made = async (path: string, body: unknown, headers: Record<string, string> = {}) => {
    const answer = await owner.post(path, body, { headers })
    if (answer.status !== 201) throw new Error(`${path}: ${answer.status} ${JSON.stringify(answer.body)}`)
    return answer.body
  }
  await made('/v1/arms', twoJointArm())
  named.recording = (await made('/v1/recordings', recordingForm())).id
  await made('/v1/recordings', recordingForm(2))
  await made('/v1/models', { name: named.model, arm: named.arm })
  checksum = (await made(`/v1/models/${named.model}/versions`, versionSnapshot(version, jointNames))).checksum
  const etag = (await owner.get(`/v1/models/${named.model}`)).headers.get('etag')!
  await made(`/v1/models/${named.model}/releases`, { version: 1, reason: 'First.' }, { 'if-match': etag })
  await made('/v1/losses', { name: named.loss, model: named.model, kind: 'state_dependent' })
  await made(`/v1/losses/${named.loss}/versions`, lossSnapshot(smallLoss(checksum)))
  named.adaptation = (await made('/v1/adaptations', { model: named.model, loss: 'mse', robot: 'bench 1' })).id
  named.job = (await made('/v1/jobs', { kind: 'fit', model: named.model, epochs: 1 })).id
  await owner.post(`/v1/jobs/${named.job}/cancel`, { reason: 'It was only for its id.' })
  named.key = (await own.createKey(['read'])).id
})
afterAll(() => server.stop())

function askAs(key: ApiClient, administrator: SessionClient, id: OperationId) {
  const operation = contractDocument().operation(id)
  const { body, query = '', headers } = requests[id]!()
  const path = operation.path.replaceAll(/\{(\w+)\}/g, (_, name: string) => named[name]!) + query
  const isForPeople = !operation.takesKey || ['manage_keys', 'resume'].includes(operation.action)
  return (isForPeople ? administrator : key).send(operation.method.toUpperCase(), path, { body, headers })
}

test('every operation of the contract is walked here, or names nothing', () => {
  const walked = [...Object.keys(requests), ...namesNothing].sort()

  expect(walked).toEqual(contractDocument().operations.map(({ id }) => id).sort())
})

describe('another team', () => {
  test.each(Object.keys(requests) as OperationId[])('%s finds nothing', async (id) => {
    const answer = await askAs(stranger, strangerAdministrator, id)

    expect(answer.status, JSON.stringify(answer.body)).toBe(404)
    expect(answer.body.type).toBe('tag:heftwise.invalid,2026:not-found')
  })

  test('sees nothing of it in any list', async () => {
    const lists = ['/v1/arms', '/v1/recordings', '/v1/models', '/v1/losses', '/v1/jobs', '/v1/adaptations']

    for (const path of lists) expect((await stranger.get(path)).body.items, path).toEqual([])
    const keys = (await strangerAdministrator.get('/v1/keys')).body.items.map(({ id }: { id: string }) => id)
    expect(keys).not.toContain(named.key)
  })
})

describe('its owner, with the same requests, finds it all', () => {
  // What ends or changes a thing comes last, so that the others still find it.
  const last: readonly OperationId[] = ['endAdaptation', 'deleteRecording', 'archiveModel', 'archiveArm', 'revokeKey']
  const order = [...(Object.keys(requests) as OperationId[]).filter((id) => !last.includes(id)), ...last]

  test.each(order)('%s', async (id) => {
    const answer = await askAs(owner, ownerAdministrator, id)

    expect(answer.status, JSON.stringify(answer.body)).not.toBe(404)
    expect([401, 403]).not.toContain(answer.status)
    expect(answer.status).toBeLessThan(500)
  })
})

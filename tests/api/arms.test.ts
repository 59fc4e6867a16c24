import { createHash } from 'node:crypto'
import { readFileSync } from 'node:fs'
import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import type { Answer } from '../support/api.ts'
import { twoJointArm } from '../support/recording-csv.ts'
import { startTestServer, type TestServer } from '../support/server.ts'

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

async function builder() {
  return (await server.createTeam()).createKey(['build', 'read'])
}

test('an arm comes back as it was described, with the fingerprint of its joints', async () => {
  const key = await builder()
  const arm = { ...twoJointArm(), horizon: 0.5, firmware: '4.2.1', description: 'Workshop arm, simulated.' }

  const made = await key.post('/v1/arms', arm)

  expect(made.status).toBe(201)
  expect(made.headers.get('location')).toBe('/v1/arms/tinker-2')
  expect(made.body).toMatchObject(arm)
  // The contract: the first 12 hex digits of SHA-256 over the joint names, joined by line feeds.
  expect(made.body.joints_fingerprint).toBe(createHash('sha256').update('swivel\nlift').digest('hex').slice(0, 12))
  expect((await key.get('/v1/arms/tinker-2')).body).toEqual(made.body)
})

describe('an arm is refused', () => {
  const swivel = twoJointArm().joints[0]
  test.each([
    ['with two joints of one name', { joints: [swivel, swivel] }, '/joints/1/name', /Joints 0 and 1 are both called "swivel"/],
    [
      'with crossed limits',
      { joints: [{ ...swivel, position_lower: 1, position_upper: -1 }] },
      '/joints/0/position_lower',
      /from 1 to -1: the lower must be less/,
    ],
    [
      'with half a limit',
      { joints: [{ ...swivel, position_lower: undefined }] },
      '/joints/0/position_lower',
      /has position_upper but no position_lower/,
    ],
    [
      'with limits on a continuous joint',
      { joints: [{ ...swivel, type: 'continuous' }] },
      '/joints/0/position_lower',
      /continuous/,
    ],
    ['with a torque limit of zero', { joints: [{ ...swivel, torque_limit: 0 }] }, '/joints/0/torque_limit', /./],
    ['with a negative velocity limit', { joints: [{ ...swivel, velocity_limit: -1 }] }, '/joints/0/velocity_limit', /./],
    ['with gravity in other units', { gravity: [0, 0, -9810] }, '/gravity', /9810 m\/s²/],
    ['with gravity in a plane', { gravity: [0, -9.81] }, '/gravity', /./],
    ['with a joint name that ends in a blank', { joints: [{ ...swivel, name: 'swivel ' }] }, '/joints/0/name', /blanks/],
    ['with a joint name of two lines', { joints: [{ ...swivel, name: 'swi\nvel' }] }, '/joints/0/name', /line ends/],
    ['without joints', { joints: [] }, '/joints', /./],
    ['with a limit that is null', { joints: [{ ...swivel, torque_limit: null }] }, '/joints/0/torque_limit', /null/],
    ['with a field nobody knows', { colour: 'red' }, '/colour', /not known/],
    ['without a fallback', { fallback: undefined }, '/fallback', /missing/],
  ])('%s', async (_, change, pointer, detail) => {
    const key = await builder()

    const refused = await key.post('/v1/arms', { ...twoJointArm(), ...change })

    expect(refused.status).toBe(422)
    expect(refused.body.type).toBe('tag:heftwise.invalid,2026:invalid-request')
    expect(refused.body.errors[0].pointer).toBe(pointer)
    expect(refused.body.detail).toMatch(detail)
  })

  test('whose controller adds terms itself, as long as arms have no rigid-body description', async () => {
    const key = await builder()
    const arm = twoJointArm()

    const refused = await key.post('/v1/arms', { ...arm, torque: { ...arm.torque, controller_adds: ['gravity'] } })

    expect(refused.status).toBe(422)
    expect(refused.body.type).toBe('tag:heftwise.invalid,2026:rigid-body-required')
    expect(refused.body.detail).toMatch(/gravity/)
  })
})

test('a name can be had once in a team, and by another team too', async () => {
  const [one, other] = [await builder(), await builder()]
  await one.post('/v1/arms', twoJointArm())

  expect((await one.post('/v1/arms', twoJointArm())).body.type).toBe('tag:heftwise.invalid,2026:name-taken')
  expect((await other.post('/v1/arms', twoJointArm())).status).toBe(201)
})

test("another team's arm is not there", async () => {
  const [one, other] = [await builder(), await builder()]
  await one.post('/v1/arms', twoJointArm('hidden-2'))

  expect((await other.get('/v1/arms/hidden-2')).status).toBe(404)
  expect((await other.post('/v1/arms/hidden-2/archive', { reason: 'not mine' })).status).toBe(404)
  expect((await other.get('/v1/arms')).body.items).toEqual([])
})

test('a list is paged by cursor and link, and each arm is on one page', async () => {
  const key = await builder()
  const names = ['ash-2', 'birch-2', 'cedar-2', 'date-2', 'elder-2']
  for (const name of names.toReversed()) await key.post('/v1/arms', twoJointArm(name))

  const seen: string[] = []
  let path: string | undefined = '/v1/arms?limit=2'
  while (path) {
    const page: Answer = await key.get(path)
    seen.push(...page.body.items.map((arm: { name: string }) => arm.name))
    const link: string | null = page.headers.get('link')
    expect(link === null).toBe(page.body.next_cursor === null)
    path = link ? /^<([^>]+)>; rel="next"$/.exec(link)![1] : undefined
  }

  expect(seen).toEqual(names)
  expect((await key.get('/v1/arms?cursor=nonsense')).status).toBe(422)
})

test('an archived arm keeps its name, leaves the list, and nothing new is built on it', async () => {
  const key = await builder()
  await key.post('/v1/arms', twoJointArm())

  const archived = await key.post('/v1/arms/tinker-2/archive', { reason: 'The arm was sold.' })

  expect(archived.body.archived_at).toEqual(expect.any(String))
  expect((await key.get('/v1/arms')).body.items).toEqual([])
  expect((await key.get('/v1/arms?archived=true')).body.items).toHaveLength(1)
  expect((await key.post('/v1/models', { name: 'm', arm: 'tinker-2' })).body.type).toBe('tag:heftwise.invalid,2026:archived')
  expect((await key.post('/v1/arms', twoJointArm())).status).toBe(409)
})

test('describing an arm leaves an audit event with who, what and the request', async () => {
  const team = await server.createTeam()
  const key = await team.createKey(['build'])

  await key.post('/v1/arms', twoJointArm(), { headers: { 'x-request-id': 'req-arm-1' } })

  const event = await server.database.models.AuditEvent.findOne({ where: { teamId: team.id, action: 'arm.create' } })
  expect(event).toMatchObject({ actorKind: 'key', actorId: key.id, subjectName: 'tinker-2', requestId: 'req-arm-1' })
})

describe('inspecting a URDF', () => {
  // Of a simulated arm.
  const heron = readFileSync('tests/data/heron-7.urdf', 'utf8')

  test('tells joints, limits and bodies of the chain, and stores nothing', async () => {
    const key = await builder()

    const inspected = await key.post('/v1/arms/inspect', { urdf: heron, base_link: 'link_1', tip_link: 'link_4' })

    expect(inspected.status).toBe(200)
    expect(inspected.body).toMatchObject({ robot: 'heron-7', base_link: 'link_1', tip_link: 'link_4', tips: ['flange'] })
    expect(inspected.body.findings).toMatchObject([{ kind: 'left_out', subject: 'link_5', rule: 'branch' }])
    expect(inspected.body.joints[0]).toEqual({
      name: 'heron_shoulder_pitch',
      type: 'revolute',
      position_lower: -1.9,
      position_upper: 1.9,
      velocity_limit: 1.6,
      torque_limit: 150,
    })
    expect(inspected.body.rigid_body.links.map(({ name }: { name: string }) => name)).toEqual(['link_2', 'link_3', 'link_4'])
    expect((await key.get('/v1/arms')).body.items).toEqual([])
  })

  test('names link, rule and numbers of a body that cannot be', async () => {
    const urdf = heron.replace('ixx="0.014369"', 'ixx="0.114369"')

    const { body } = await (await builder()).post('/v1/arms/inspect', { urdf })

    expect(body.findings).toMatchObject([{ kind: 'inconsistent', subject: 'link_4', rule: 'triangle_inequality' }])
    expect(body.findings[0].detail).toMatch(/kg·m²/)
  })

  test.each([
    ['a DOCTYPE', { urdf: `<!DOCTYPE robot>${heron}` }, '/urdf', /has a DOCTYPE/],
    ['an unknown tip', { urdf: heron, tip_link: 'link_99' }, '/tip_link', /no link "link_99"/],
    ['an unknown base', { urdf: heron, base_link: 'link_99' }, '/base_link', /no link "link_99"/],
    ['links the wrong way round', { urdf: heron, base_link: 'link_4', tip_link: 'link_2' }, '/urdf', /does not hang on/],
    ['a file that is too large', { urdf: heron.padEnd(1_000_001) }, '/urdf', /at most 1000000/],
  ])('refuses %s', async (_, body, pointer, detail) => {
    const refused = await (await builder()).post('/v1/arms/inspect', body)

    expect(refused.status).toBe(422)
    expect(refused.body.errors[0].pointer).toBe(pointer)
    expect(refused.body.detail).toMatch(detail)
  })
})

import { afterAll, beforeAll, expect, test } from 'vitest'
import { startTestServer } from '../support/server.ts'
import type { TestServer } from '../support/server.ts'

let server: TestServer
beforeAll(async () => {
  server = await startTestServer()
})
afterAll(() => server.stop())

test('who signs in sees team, role and what the role may do', async () => {
  const team = await server.createTeam()
  const operator = await team.signIn('operator')

  const session = await operator.get('/v1/session')

  expect(session.status).toBe(200)
  expect(session.body).toMatchObject({ team: { id: team.id, name: team.name }, role: 'operator', key: null, simulated: false })
  expect(session.body.actions).toContain('freeze')
  expect(session.body.actions).not.toContain('manage_keys')
})

import { randomUUID } from 'node:crypto'
import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import { rolesFor, scopesFor } from '../../server/services/permissions.ts'
import type { Role, Scope } from '../../server/services/permissions.ts'
import type { Operation } from '../../server/middleware/contract-document.ts'
import { client, contractDocument } from '../support/api.ts'
import type { ApiClient, SessionClient } from '../support/api.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer, TestTeam } from '../support/server.ts'

/**
 * Walks every operation of the contract with every role and every scope of a key. What is asked for does not exist, so a caller
 * who may do it gets any answer but 401 and 403, and nothing is changed.
 */
const roles: readonly Role[] = ['engineer', 'operator', 'reviewer', 'administrator']
const scopes: readonly Scope[] = ['predict', 'adapt', 'read', 'build', 'release']

let server: TestServer
let team: TestTeam
const people = new Map<Role, SessionClient>()
const keys = new Map<Scope, ApiClient>()
beforeAll(async () => {
  server = await startTestServer()
  team = await server.createTeam()
  for (const role of roles) people.set(role, await team.signIn(role))
  for (const scope of scopes) keys.set(scope, await team.createKey([scope]))
})
afterAll(() => server.stop())

const operations = contractDocument().operations
const closed = operations.filter(({ action }) => action !== 'anyone')
const named = (list: readonly Operation[]) => list.map((operation) => [operation.id, operation] as const)

/** These end or change the very session or key that asks; they get a caller of their own. */
const consuming = new Set(['signOut', 'changePassword', 'rotateCurrentKey'])

function concrete({ path }: Operation): string {
  return path
    .replaceAll(/\{(model|arm|loss)\}/g, 'not-there')
    .replaceAll(/\{(version|position)\}/g, '1')
    .replaceAll(/\{(adaptation|recording|job|key)\}/g, randomUUID())
}

async function ask(caller: ApiClient, operation: Operation): Promise<{ status: number; type: string | undefined; challenge: string | null }> {
  const isJson = operation.bodyTypes.includes('application/json')
  const answer = await caller.send(operation.method.toUpperCase(), concrete(operation), operation.bodyTypes.length > 0 && isJson ? { body: {} } : {})
  return { status: answer.status, type: answer.body?.type?.split(':').at(-1), challenge: answer.headers.get('www-authenticate') }
}

describe('the table', () => {
  test('has a row for the action of every operation, and no other row', () => {
    const used = new Set(closed.map(({ action }) => action))

    for (const action of used) expect(rolesFor(action as never).length + scopesFor(action as never).length).toBeGreaterThan(0)
  })

  test('opens to anyone only sign-in, health and the contract itself', () => {
    expect(operations.filter(({ action }) => action === 'anyone').map(({ id }) => id).sort()).toEqual(['contract', 'health', 'readiness', 'signIn'])
  })

  test('lets no key near resume, keys and passwords', () => {
    const shut = operations.filter(({ action, takesKey }) => action !== 'anyone' && (!takesKey || scopesFor(action).length === 0)).map(({ id }) => id)

    expect(shut).toEqual(expect.arrayContaining(['resumeAdaptation', 'createKey', 'revokeKey', 'rotateKey', 'listKeys', 'getKey', 'changePassword', 'signOut', 'chooseTeam']))
  })
})

describe('without credentials', () => {
  test.each(named(closed))('%s is refused with a challenge that has no error code', async (_id, operation) => {
    const { status, challenge } = await ask(server.api(), operation)

    // RFC 6750, section 3.1: no error code when no authentication information was sent.
    expect(status).toBe(401)
    expect(challenge).toBe('Bearer realm="heftwise"')
  })
})

describe.each(roles)('a person who is %s', (role) => {
  test.each(named(closed))('%s', async (id, operation) => {
    const caller = consuming.has(id) ? await team.signIn(role) : people.get(role)!
    const may = operation.takesSession && (rolesFor(operation.action as never) as readonly Role[]).includes(role)

    const { status, type } = await ask(caller, operation)

    if (may) expect([401, 403]).not.toContain(status)
    else expect([status, type]).toEqual([403, 'role-not-allowed'])
    expect(status).toBeLessThan(500)
  })
})

describe.each(scopes)('a key with scope %s', (scope) => {
  test.each(named(closed))('%s', async (id, operation) => {
    const caller = consuming.has(id) ? await team.createKey([scope]) : keys.get(scope)!
    const may = operation.takesKey && (scopesFor(operation.action as never) as readonly Scope[]).includes(scope)

    const { status, type, challenge } = await ask(caller, operation)

    if (may) {
      expect([401, 403]).not.toContain(status)
    } else {
      expect([status, type]).toEqual([403, 'insufficient-scope'])
      // RFC 6750, section 3.1.
      expect(challenge).toMatch(/^Bearer .*error="insufficient_scope"/)
    }
    expect(status).toBeLessThan(500)
  })
})

describe('a session without its CSRF token', () => {
  test.each(named(closed.filter(({ method, takesSession }) => method !== 'get' && takesSession)))('%s is refused', async (_id, operation) => {
    const { status, type } = await ask(client(server.origin, { cookie: people.get('administrator')!.cookie }), operation)

    expect([status, type]).toEqual([403, 'csrf-token-missing'])
  })
})

import { Validator } from '@seriousme/openapi-schema-validator'
import type { Express } from 'express'
import { afterAll, beforeAll, describe, expect, test } from 'vitest'
import { createApp } from '../../server/app.ts'
import { allActions } from '../../server/services/permissions.ts'
import { contractDocument } from '../support/api.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer } from '../support/server.ts'

let server: TestServer
let app: Express
beforeAll(async () => {
  server = await startTestServer()
  app = createApp(server.dependencies, server.services)
})
afterAll(() => server.stop())

interface Layer {
  route?: { path: string | string[]; methods: Record<string, boolean> }
  handle: { stack?: Layer[] }
}

/** Every route that any router of the app holds, as the contract writes it: `get /v1/arms/{arm}`. */
function mountedRoutes(stack: readonly Layer[]): string[] {
  return stack.flatMap(({ route, handle }) => {
    if (!route) return mountedRoutes(handle.stack ?? [])
    return [route.path].flat().flatMap((path) => Object.keys(route.methods).map((method) => `${method} ${path.replaceAll(/:(\w+)/g, '{$1}')}`))
  })
}

/** Pages for people, not part of the API. */
const isPage = (route: string) => route === 'get /{*path}' || /^\w+ \/docs/.test(route)

describe('routes and contract agree', () => {
  test('every route of the app is in openapi.yaml', () => {
    const listed = new Set(contractDocument().operations.map(({ method, path }) => `${method} ${path}`))

    const unlisted = mountedRoutes((app.router as unknown as { stack: Layer[] }).stack).filter((route) => !listed.has(route) && !isPage(route))

    expect(unlisted).toEqual([])
  })

  test('every operation of openapi.yaml has a route', () => {
    const mounted = new Set(mountedRoutes((app.router as unknown as { stack: Layer[] }).stack))

    const missing = contractDocument().operations.map(({ method, path }) => `${method} ${path}`).filter((route) => !mounted.has(route))

    expect(missing).toEqual([])
  })

  test('every x-action is in the permission table, and every row of it is used', () => {
    const used = new Set<string>(contractDocument().operations.map(({ action }) => action))

    used.delete('anyone')
    expect([...used].sort()).toEqual([...allActions].sort())
  })
})

describe('openapi.yaml', () => {
  // Source: the OpenAPI Initiative's JSON Schema for OpenAPI 3.1, as shipped by @seriousme/openapi-schema-validator.
  test('is a valid OpenAPI 3.1 document by the published schema', async () => {
    const validator = new Validator()

    const result = await validator.validate(structuredClone(contractDocument().document) as Record<string, unknown>)

    expect(result.errors).toBeUndefined()
    expect(result.valid).toBe(true)
    expect(validator.version).toBe('3.1')
  })

  test('would not pass that check with a field that OpenAPI does not know', async () => {
    const broken = structuredClone(contractDocument().document) as { paths: Record<string, Record<string, unknown>> }
    broken.paths['/healthz']!.fetch = { responses: {} }

    expect((await new Validator().validate(broken as unknown as Record<string, unknown>)).valid).toBe(false)
  })

  test('gives examples that pass its own schemas', () => {
    const document = contractDocument()
    const paths = (document.document as { paths: Record<string, Record<string, any>> }).paths
    const examples = document.operations.flatMap(({ id, method, path }) => {
      const content = paths[path]![method].requestBody?.content?.['application/json'] ?? {}
      const values = [content.example, ...Object.values(content.examples ?? {}).map((entry: any) => entry.value)].filter((value) => value !== undefined)
      return values.map((value) => [id, value] as const)
    })

    expect(examples.length).toBeGreaterThan(5)
    for (const [id, value] of examples) expect(document.bodyCheck(id, 'application/json')(structuredClone(value)), id).toEqual([])
  })

  test('is served as it is, and shown by Swagger UI without files from elsewhere', async () => {
    const file = await server.api().get('/openapi.yaml')
    const page = await server.api().get('/docs/')
    const script = await server.api().get('/docs/swagger-ui-init.js')

    expect(file.body).toBe(contractDocument().text)
    expect(page.status).toBe(200)
    const html = Buffer.isBuffer(page.body) ? page.body.toString() : String(page.body)
    expect(html).toContain('swagger-ui-bundle.js')
    expect(html).not.toMatch(/(?:src|href)="https?:/)
    expect(script.status).toBe(200)
    const policy = page.headers.get('content-security-policy')!
    expect(policy).toContain("script-src 'self';")
    expect(policy).toContain("frame-ancestors 'none'")
  })
})

describe('the check of answers in tests', () => {
  test('catches an answer that breaks its schema', () => {
    const check = contractDocument().answerCheck('health', 200, 'application/json')!

    expect(check({ status: 'ok' })).toEqual([])
    expect(check({ status: 'fine' })).not.toEqual([])
  })

  test('catches a status and a type that the contract does not list', () => {
    expect(contractDocument().answerCheck('health', 204, '')).toBeUndefined()
    expect(contractDocument().answerCheck('health', 200, 'text/html')).toBeUndefined()
  })
})

import { Refusal } from '../../shared/contract/problems.ts'
import type { components } from '../../shared/contract/openapi.generated.ts'

export type Role = components['schemas']['Role']
export type Scope = components['schemas']['Scope']

/**
 * The one table of action × role × scope. An operation of the contract names its action in `x-action`; services call
 * `requireAction` with the same names. `people` actions are open to no key, whatever its scopes.
 */
const actions = {
  predict: { roles: ['engineer', 'reviewer', 'administrator'], scopes: ['predict'] },
  snapshot: { roles: ['engineer', 'operator', 'reviewer', 'administrator'], scopes: ['predict', 'read'] },
  read_operation: { roles: ['engineer', 'operator', 'reviewer', 'administrator'], scopes: ['adapt', 'read'] },
  adapt: { roles: ['engineer', 'operator', 'administrator'], scopes: ['adapt'] },
  post_batches: { roles: ['engineer', 'administrator'], scopes: ['adapt'] },
  freeze: { roles: ['engineer', 'operator', 'administrator'], scopes: ['adapt'] },
  reset: { roles: ['engineer', 'operator', 'administrator'], scopes: ['adapt'] },
  resume: { roles: ['engineer', 'operator', 'administrator'], scopes: [] },
  read_arms: { roles: ['engineer', 'operator', 'reviewer', 'administrator'], scopes: ['predict', 'read', 'build'] },
  read_models: { roles: ['engineer', 'operator', 'reviewer', 'administrator'], scopes: ['predict', 'read', 'build', 'release'] },
  read: { roles: ['engineer', 'operator', 'reviewer', 'administrator'], scopes: ['read', 'build'] },
  build: { roles: ['engineer', 'administrator'], scopes: ['build'] },
  release: { roles: ['engineer', 'administrator'], scopes: ['release'] },
  roll_back: { roles: ['engineer', 'operator', 'administrator'], scopes: ['release'] },
  manage_keys: { roles: ['administrator'], scopes: [] },
  self: { roles: ['engineer', 'operator', 'reviewer', 'administrator'], scopes: ['predict', 'adapt', 'read', 'build', 'release'] },
} as const satisfies Record<string, { roles: readonly Role[]; scopes: readonly Scope[] }>

export type Action = keyof typeof actions
export const allActions = Object.keys(actions) as Action[]

/** Who asks, in which team. Services take this, never a request. */
export type Caller =
  | { kind: 'person'; teamId: string; id: string; name: string; role: Role; sessionId: string }
  | { kind: 'key'; teamId: string; id: string; name: string; scopes: readonly Scope[]; secret?: 'newest' | 'former' }

export function rolesFor(action: Action): readonly Role[] {
  return actions[action].roles
}

export function scopesFor(action: Action): readonly Scope[] {
  return actions[action].scopes
}

export function mayDo(caller: Caller, action: Action): boolean {
  const { roles, scopes } = actions[action]
  return caller.kind === 'person'
    ? (roles as readonly Role[]).includes(caller.role)
    : caller.scopes.some((scope) => (scopes as readonly Scope[]).includes(scope))
}

/** @throws {Refusal} insufficient-scope (RFC 6750) for a key, role-not-allowed for a person */
export function requireAction(caller: Caller, action: Action): void {
  if (mayDo(caller, action)) return
  const { roles, scopes } = actions[action]
  if (caller.kind === 'person') {
    throw new Refusal('role-not-allowed', `Your role is ${caller.role}; this needs ${orList(roles)}. Ask one of them, or an administrator for another role.`)
  }
  if (scopes.length === 0) {
    throw new Refusal('insufficient-scope', 'No key may do this, only people signed in to the console. Sign in with a role that may.', {
      headers: { 'WWW-Authenticate': 'Bearer error="insufficient_scope"' },
    })
  }
  throw new Refusal('insufficient-scope', `Key "${caller.name}" has ${caller.scopes.join(', ')}; this needs ${orList(scopes)}. Use or create a key with that scope.`, {
    headers: { 'WWW-Authenticate': `Bearer error="insufficient_scope", scope="${scopes[0]}"` },
  })
}

function orList(words: readonly string[]): string {
  return words.length < 2 ? words.join() : `${words.slice(0, -1).join(', ')} or ${words.at(-1)}`
}

/** How a caller is named in records that people read. */
export function callerLabel(caller: Caller): string {
  return caller.kind === 'person' ? caller.name : `key ${caller.name}`
}

import type { components, operations } from '../shared/contract/openapi.generated.ts'

export type Schemas = components['schemas']
type Operations = operations

type JsonOf<T> = T extends { content: { 'application/json': infer J } } ? J : never

/** The query parameters of an operation of the contract. */
export type QueryOf<O extends keyof Operations> = NonNullable<Operations[O]['parameters']['query']>

/** The JSON body that an operation of the contract takes. */
export type BodyOf<O extends keyof Operations> = JsonOf<NonNullable<Operations[O]['requestBody']>>

type Success<R> = R extends { 200: infer A } ? A : R extends { 201: infer A } ? A : never

/** The JSON that an operation of the contract answers when it succeeds. */
export type AnswerOf<O extends keyof Operations> = JsonOf<Success<Operations[O]['responses']>>

import type { Dependencies } from '../dependencies.ts'
import { createKeyService } from './keys.ts'
import { createPeopleService } from './people.ts'
import { createSessionService } from './sessions.ts'

/** Every service, made once. Add yours here: one line each. */
export function createServices(d: Dependencies) {
  const sessions = createSessionService(d)
  const people = createPeopleService(d)
  const keys = createKeyService(d)
  return { sessions, people, keys }
}

export type Services = ReturnType<typeof createServices>

import type { TestProject } from 'vitest/node'
import type { DatabaseAddress } from '../../server/database/connection.ts'
import { joinTestMariaDb } from './database.ts'

declare module 'vitest' {
  interface ProvidedContext {
    mariaDb: DatabaseAddress
  }
}

export default async function setup({ provide }: TestProject): Promise<() => Promise<void>> {
  const { address, leave } = await joinTestMariaDb()
  provide('mariaDb', address)
  return leave
}

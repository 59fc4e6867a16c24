import pino from 'pino'
import { expect, test } from 'vitest'
import { createLog, errorForLog } from '../../../server/dependencies.ts'
import { openDatabase } from '../../../server/database/connection.ts'

/** As the database's connector and Sequelize throw it. */
function databaseError(): Error {
  const text = "(conn:7, no: 1062, SQLState: 23000) Duplicate entry for key 'people_email'\nsql: INSERT INTO people VALUES (?,\n ?) - parameters:['ada@example.org','$2b$12$secret']"
  const cause = Object.assign(new Error(text), { errno: 1062, sql: text })
  return Object.assign(new Error(text, { cause }), { errno: 1062, sql: 'INSERT … $2b$12$secret', parameters: ['$2b$12$secret'], parent: cause, original: cause })
}

test('what was to be stored does not enter the log with the error', () => {
  const told = JSON.stringify(errorForLog(databaseError()))

  expect(told).toContain("Duplicate entry for key 'people_email'")
  expect(told).toContain('error-log.test.ts')
  expect(told).toContain('1062')
  expect(told).not.toMatch(/secret|INSERT|ada@example/)
})

test('the server’s log writes errors that way', () => {
  const log = createLog({ logLevel: 'error' }) as unknown as Record<symbol, Record<string, unknown>>

  expect(log[pino.symbols.serializersSym].err).toBe(errorForLog)
})

test('connections put no parameters into their errors', async () => {
  const database = openDatabase({ host: '127.0.0.1', port: 1, user: 'nobody', password: '', database: 'none' })

  const { options } = database.sequelize as unknown as { options: { dialectOptions: { logParam?: boolean } } }
  expect(options.dialectOptions.logParam).toBe(false)
  await database.close()
})

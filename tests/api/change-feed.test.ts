import { randomUUID } from 'node:crypto'
import { afterAll, beforeAll, expect, test } from 'vitest'
import type { Change } from '../../server/services/change-feed.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer } from '../support/server.ts'

let here: TestServer
let there: TestServer
const heard = { here: [] as Change[], there: [] as Change[] }
beforeAll(async () => {
  here = await startTestServer()
  there = await here.another()
  here.dependencies.changeFeed.on('archive', (change) => void heard.here.push(change))
  there.dependencies.changeFeed.on('archive', (change) => void heard.there.push(change))
})
afterAll(async () => {
  await there.stop()
  await here.stop()
})

const change = (): Change => ({ kind: 'archive', teamId: randomUUID(), subject: randomUUID() })
const within = async (ms: number, condition: () => boolean) => {
  const deadline = Date.now() + ms
  while (!condition() && Date.now() < deadline) await new Promise((done) => setTimeout(done, 10))
  return condition()
}

test('a change is heard here with its commit, and elsewhere within a second', async () => {
  const told = change()

  await here.database.transaction((transaction) => here.dependencies.changeFeed.announce(transaction, told))

  expect(heard.here).toContainEqual(told)
  expect(await within(1_000, () => heard.there.some(({ subject }) => subject === told.subject))).toBe(true)
})

test('a change that is rolled back is heard nowhere', async () => {
  const told = change()

  await here.database
    .transaction(async (transaction) => {
      await here.dependencies.changeFeed.announce(transaction, told)
      throw new Error('not after all')
    })
    .catch(() => undefined)
  await new Promise((done) => setTimeout(done, 600))

  expect([...heard.here, ...heard.there].map(({ subject }) => subject)).not.toContain(told.subject)
})

test('one that commits after a later one was heard is not missed', async () => {
  const [slow, quick] = [change(), change()]
  let commit = () => {}
  const mayCommit = new Promise<void>((done) => (commit = done))

  const slowly = here.database.transaction(async (transaction) => {
    await here.dependencies.changeFeed.announce(transaction, slow)
    await mayCommit
  })
  await new Promise((done) => setTimeout(done, 100))
  await here.database.transaction((transaction) => here.dependencies.changeFeed.announce(transaction, quick))
  expect(await within(1_000, () => heard.there.some(({ subject }) => subject === quick.subject))).toBe(true)
  commit()
  await slowly

  expect(await within(1_000, () => heard.there.some(({ subject }) => subject === slow.subject))).toBe(true)
})

test('each is heard once', async () => {
  const told = change()

  await there.database.transaction((transaction) => there.dependencies.changeFeed.announce(transaction, told))
  await within(1_000, () => heard.here.some(({ subject }) => subject === told.subject))
  await new Promise((done) => setTimeout(done, 600))

  expect(heard.here.filter(({ subject }) => subject === told.subject)).toHaveLength(1)
  expect(heard.there.filter(({ subject }) => subject === told.subject)).toHaveLength(1)
})

test('one whose commit was never answered is heard here too', async () => {
  const told = change()
  const connection = await here.database.pool.getConnection()

  // What is to be called after the commit is not called.
  await here.dependencies.changeFeed.announceOn(connection, told)
  await connection.release()

  expect(await within(1_000, () => heard.here.some(({ subject }) => subject === told.subject))).toBe(true)
})

import { createHash } from 'node:crypto'
import { afterAll, beforeAll, describe, expect, test, vi } from 'vitest'
import { client, cookieOf } from '../support/api.ts'
import { testClock } from '../support/clock.ts'
import { startTestServer } from '../support/server.ts'
import type { TestServer, TestTeam } from '../support/server.ts'

const clock = testClock()
let server: TestServer
let team: TestTeam
beforeAll(async () => {
  server = await startTestServer({ clock })
  team = await server.createTeam()
})
afterAll(() => server.stop())

const credentials = ({ email, password }: { email: string; password: string }) => ({ email, password })

describe('signing in', () => {
  test('who signs in sees team, role and what the role may do', async () => {
    const operator = await team.signIn('operator')

    const session = await operator.get('/v1/session')

    expect(session.status).toBe(200)
    expect(session.body).toMatchObject({ team: { id: team.id, name: team.name }, role: 'operator', key: null, simulated: false })
    expect(session.body.actions).toContain('freeze')
    expect(session.body.actions).not.toContain('manage_keys')
  })

  test('the cookie is out of reach of scripts and of other sites', async () => {
    const person = await team.createPerson('engineer')

    const answer = await server.api().post('/v1/session', credentials(person))

    const [cookie] = answer.headers.getSetCookie()
    expect(cookie).toMatch(/^heftwise_session=/)
    expect(cookie).toMatch(/; HttpOnly/)
    expect(cookie).toMatch(/; SameSite=Strict/)
    expect(cookie).toMatch(/; Path=\//)
    expect(cookie).not.toMatch(/; Secure/)
  })

  test('the cookie is sent over https only where the origin is https', async () => {
    const secure = await server.another({ origin: 'https://heftwise.example.org' })
    const person = await team.createPerson('engineer')

    const answer = await secure.api().post('/v1/session', credentials(person))

    expect(answer.headers.getSetCookie()[0]).toMatch(/; Secure/)
    expect(answer.headers.get('strict-transport-security')).toMatch(/max-age=\d+/)
    await secure.stop()
  })

  test('an e-mail address is known in any case and with spaces around it', async () => {
    const person = await team.createPerson('engineer')

    const answer = await server.api().post('/v1/session', { email: ` ${person.email.toUpperCase()} `, password: person.password })

    expect(answer.status).toBe(201)
  })

  test('an unknown address and a wrong password get the same answer', async () => {
    const person = await team.createPerson('engineer')

    const unknown = await server.api().post('/v1/session', { email: 'nobody-here@example.org', password: person.password })
    const wrong = await server.api().post('/v1/session', { email: person.email, password: `${person.password}!` })

    expect(unknown.status).toBe(401)
    const { request_id: _a, ...unknownBody } = unknown.body
    const { request_id: _b, ...wrongBody } = wrong.body
    expect(wrongBody).toEqual(unknownBody)
    expect(wrong.headers.getSetCookie()).toEqual([])
  })

  test('somebody without a team cannot sign in', async () => {
    const person = await team.createPerson('engineer')
    await server.database.models.Membership.destroy({ where: { personId: person.id } })

    expect((await server.api().post('/v1/session', credentials(person))).status).toBe(401)
  })

  test('the session id changes at sign-in, so one planted before is worth nothing', async () => {
    const victim = await team.createPerson('engineer')
    const attacker = await team.signIn('operator')

    const planted = client(server.origin, { cookie: attacker.cookie })
    const answer = await planted.post('/v1/session', credentials(victim))

    expect(answer.status).toBe(201)
    expect(cookieOf(answer)).not.toBe(attacker.cookie)
    const old = await planted.get('/v1/session')
    expect(old.status, 'the planted id is not the victim’s session').toBe(401)
  })

  test('the database holds the SHA-256 of the session id and not the id', async () => {
    const engineer = await team.signIn('engineer')

    const id = decodeURIComponent(engineer.cookie.split('=')[1]!).slice(2).split('.')[0]!
    const rows = await server.database.models.Session.findAll({ where: { personId: engineer.personId } })

    expect(rows.map((row) => row.idHash)).toEqual([createHash('sha256').update(id).digest('hex')])
    expect(JSON.stringify(rows)).not.toContain(id)
  })

  test('a cookie with a forged signature is no session', async () => {
    const engineer = await team.signIn('engineer')

    const forged = client(server.origin, { cookie: engineer.cookie.slice(0, -4) + 'AAAA' })

    expect((await forged.get('/v1/session')).status).toBe(401)
  })

  test('guesses at one address are throttled; other people still sign in', async () => {
    const person = await team.createPerson('engineer')
    const other = await team.createPerson('engineer')

    const statuses: number[] = []
    for (let i = 0; i < 11; i++) statuses.push((await server.api().post('/v1/session', { email: person.email, password: `guess number ${i}` })).status)
    const right = await server.api().post('/v1/session', credentials(person))

    expect(statuses).toEqual([...Array<number>(10).fill(401), 429])
    expect(right.status).toBe(429)
    expect(Number(right.headers.get('retry-after'))).toBeGreaterThan(0)
    expect(right.headers.get('ratelimit')).toMatch(/r=0/)
    expect((await server.api().post('/v1/session', credentials(other))).status).toBe(201)
  })

  test('an address that only looks like a person’s is another one, so that it buys no more guesses', async () => {
    const person = await team.createPerson('engineer')
    const lookAlikes = [person.email.replace('e', 'é'), person.email.replace('@', '\u0001@')]

    const answers = await Promise.all(lookAlikes.map((email) => server.api().post('/v1/session', { email, password: person.password })))

    expect(answers.map(({ status }) => status)).toEqual([401, 401])
  })

  test('guesses from one address of the network are throttled', async () => {
    const strict = await server.another({ limits: { signInsPerAddress: 3 } })

    const statuses: number[] = []
    for (let i = 0; i < 4; i++) statuses.push((await strict.api().post('/v1/session', { email: `person-${i}@example.org`, password: 'whatever it is' })).status)

    expect(statuses).toEqual([401, 401, 401, 429])
    await strict.stop()
  })
})

describe('a session', () => {
  test('ends when the person signs out, for whoever kept the cookie', async () => {
    const engineer = await team.signIn('engineer')

    const answer = await engineer.delete('/v1/session')

    expect(answer.status).toBe(204)
    expect(answer.headers.getSetCookie()[0]).toMatch(/^heftwise_session=;/)
    expect((await engineer.get('/v1/session')).status).toBe(401)
  })

  test('that was ended while a request of it ran stays ended', async () => {
    const engineer = await team.signIn('engineer')
    const second = await server.createTeam()
    await server.services.people.add({ teamId: second.id, email: engineer.email, name: 'A guest', role: 'engineer', password: engineer.password })
    const { Membership: memberships } = server.database.models
    const find = memberships.findOne.bind(memberships)
    const ending = vi.spyOn(memberships, 'findOne').mockImplementationOnce(async (options) => {
      await server.database.models.Session.destroy({ where: { personId: engineer.personId } })
      return find(options)
    })

    const running = await engineer.patch('/v1/session', { team: second.id })
    ending.mockRestore()

    expect(running.status).toBe(200)
    expect((await engineer.get('/v1/session')).status).toBe(401)
    expect(await server.database.models.Session.count({ where: { personId: engineer.personId } })).toBe(0)
  })

  test('that nobody uses any more is deleted at the next sign-in', async () => {
    const forgotten = await team.signIn('engineer')
    clock.advance(2 * 3_600_000)

    await team.signIn('engineer')

    expect(await server.database.models.Session.count({ where: { personId: forgotten.personId } })).toBe(0)
  })

  test('ends after an hour without use', async () => {
    const engineer = await team.signIn('engineer')

    clock.advance(59 * 60_000)
    expect((await engineer.get('/v1/session')).status).toBe(200)
    clock.advance(59 * 60_000)
    expect((await engineer.get('/v1/session')).status, 'use began the hour anew').toBe(200)
    clock.advance(61 * 60_000)
    expect((await engineer.get('/v1/session')).status).toBe(401)
  })

  test('ends after a day however much it is used', async () => {
    const engineer = await team.signIn('engineer')

    for (let hour = 0; hour < 48; hour++) {
      clock.advance(30 * 60_000)
      expect((await engineer.get('/v1/session')).status).toBe(200)
    }
    clock.advance(60_000)
    expect((await engineer.get('/v1/session')).status).toBe(401)
  })

  test('follows a change of role at once', async () => {
    const person = await team.signIn('administrator')

    await server.database.models.Membership.update({ role: 'reviewer' }, { where: { personId: person.personId, teamId: team.id } })

    expect((await person.get('/v1/session')).body.role).toBe('reviewer')
    expect((await person.get('/v1/keys')).status).toBe(403)
  })

  test('is worth nothing once the person has left the team', async () => {
    const person = await team.signIn('engineer')

    await server.database.models.Membership.destroy({ where: { personId: person.personId } })

    expect((await person.get('/v1/session')).status).toBe(401)
  })

  test('works in every server process on the same database', async () => {
    const person = await team.signIn('engineer')
    const second = await server.another()

    expect((await client(second.origin, { cookie: person.cookie }).get('/v1/session')).status).toBe(200)
    await second.stop()
  })

  test('moves between the teams of a person, and to no other', async () => {
    const person = await team.signIn('engineer')
    const second = await server.createTeam()
    const foreign = await server.createTeam()
    await server.services.people.add({ teamId: second.id, email: person.email, name: 'The same', role: 'operator', password: person.password })

    const moved = await person.patch('/v1/session', { team: second.id })
    const refused = await person.patch('/v1/session', { team: foreign.id })

    expect(moved.body).toMatchObject({ team: { id: second.id }, role: 'operator' })
    expect(moved.body.teams.map(({ id }: { id: string }) => id).sort()).toEqual([team.id, second.id].sort())
    expect((await person.get('/v1/session')).body.team.id).toBe(second.id)
    expect(refused.status).toBe(404)
  })
})

describe('forgery', () => {
  test.each([
    ['without a token', {}],
    ['with a token of another session', { 'x-csrf-token': 'f'.repeat(256) }],
  ])('a changing request %s is refused', async (_case, headers) => {
    const administrator = await team.signIn('administrator')

    const answer = await client(server.origin, { cookie: administrator.cookie, ...headers }).post('/v1/keys', { name: 'forged', scopes: ['read'] })

    expect(answer.status).toBe(403)
    expect(answer.body.type).toBe('tag:heftwise.invalid,2026:csrf-token-missing')
  })

  test.each<Record<string, string>>([
    { origin: 'https://elsewhere.example.org' },
    { origin: 'null' },
    { 'sec-fetch-site': 'cross-site' },
    { 'sec-fetch-site': 'same-site' },
  ])('a changing request from %o is refused even with the token', async (headers) => {
    const administrator = await team.signIn('administrator')

    // fetch keeps these headers to itself; node:http sends what it is told.
    const status = await rawStatus(`${server.origin}/v1/keys`, { ...headers, cookie: administrator.cookie, 'x-csrf-token': administrator.csrfToken })

    expect(status).toBe(403)
  })

  test('a request from the console’s own pages is taken', async () => {
    const administrator = await team.signIn('administrator')

    const status = await rawStatus(`${server.origin}/v1/keys`, { origin: server.origin, 'sec-fetch-site': 'same-origin', cookie: administrator.cookie, 'x-csrf-token': administrator.csrfToken })

    expect(status).toBe(201)
  })

  test('another site cannot sign its visitor in', async () => {
    const person = await team.createPerson('engineer')

    const status = await rawStatus(`${server.origin}/v1/session`, { origin: 'https://elsewhere.example.org' }, JSON.stringify(credentials(person)))

    expect(status).toBe(403)
  })

  test('keys need no token', async () => {
    const key = await team.createKey(['adapt'])

    const answer = await key.post('/v1/keys/current/rotate', {})

    expect(answer.status).toBe(200)
  })
})

describe('changing the password', () => {
  test('ends the other sessions, keeps this one under a new id, and the old password is over', async () => {
    const person = await team.createPerson('engineer')
    const [here, there] = await Promise.all([1, 2].map(() => server.api().post('/v1/session', credentials(person))))
    const inSession = (answer: typeof here) => client(server.origin, { cookie: cookieOf(answer!)!, 'x-csrf-token': answer!.body.csrf_token })
    const next = 'quiet harbour beneath seven cranes'

    const changed = await inSession(here).put('/v1/session/password', { current: person.password, new: next })

    expect(changed.status).toBe(204)
    expect((await client(server.origin, { cookie: cookieOf(changed)! }).get('/v1/session')).status).toBe(200)
    expect((await inSession(here).get('/v1/session')).status, 'the id before the change').toBe(401)
    expect((await inSession(there).get('/v1/session')).status, 'the other browser').toBe(401)
    expect((await server.api().post('/v1/session', credentials(person))).status).toBe(401)
    expect((await server.api().post('/v1/session', { email: person.email, password: next })).status).toBe(201)
  })

  test('needs the current one', async () => {
    const person = await team.signIn('engineer')

    const answer = await person.put('/v1/session/password', { current: 'not the current one', new: 'quiet harbour beneath seven cranes' })

    expect(answer.status).toBe(401)
    expect(answer.body.errors[0].pointer).toBe('/current')
  })

  test.each([
    ['short by one', 'fourteen chars', /14 characters/],
    ['common words', 'passwordpassword1', /tried first/],
    ['the person’s own name', 'a-engineer-a-engineer', /tried first/],
  ])('refuses a new one that is %s', async (_case, password, detail) => {
    const person = await team.signIn('engineer')

    const answer = await person.put('/v1/session/password', { current: person.password, new: password })

    expect(answer.status).toBe(422)
    expect(answer.body.type).toBe('tag:heftwise.invalid,2026:password-unsuitable')
    expect(answer.body.detail).toMatch(detail)
    expect(answer.body.errors[0].pointer).toBe('/new')
    expect(JSON.stringify(answer.body)).not.toContain(password)
  })
})

async function rawStatus(url: string, headers: Record<string, string>, body = JSON.stringify({ name: 'from a page', scopes: ['read'] })): Promise<number> {
  const { request } = await import('node:http')
  return new Promise((done, fail) => {
    const sent = request(url, { method: 'POST', headers: { 'content-type': 'application/json', ...headers } }, (answer) => {
      answer.resume()
      done(answer.statusCode!)
    })
    sent.on('error', fail)
    sent.end(body)
  })
}

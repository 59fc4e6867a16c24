import { Op } from 'sequelize'
import type { components } from '../../shared/contract/openapi.generated.ts'
import { Refusal } from '../../shared/contract/problems.ts'
import type { Fault } from '../../shared/contract/problems.ts'
import type { Dependencies } from '../dependencies.ts'
import type { Person } from '../models/person.ts'
import { createPasswords, requireSuitable } from './passwords.ts'
import { normalEmail } from './people.ts'
import { allActions, mayDo, requireAction } from './permissions.ts'
import type { Caller } from './permissions.ts'

type SessionView = components['schemas']['Session']
type PersonCaller = Caller & { kind: 'person' }

export interface SessionService {
  /** @throws {Refusal} sign-in-failed, the same for an unknown address, a wrong password and somebody without a team */
  signIn(credentials: { email: string; password: string }, requestId: string): Promise<{ personId: string; teamId: string }>
  /** The person behind a session, with the role held right now; undefined when there is none any more. */
  caller(personId: string, teamId: string | undefined, sessionId: string): Promise<PersonCaller | undefined>
  describe(caller: Caller, csrfToken: string | null): Promise<SessionView>
  /** @throws {Refusal} not-found: not a team of this person */
  requireMember(caller: Caller, teamId: string): Promise<void>
  recordSignOut(caller: Caller, requestId: string): Promise<void>
  /** Ends all of the person's sessions. @throws {Refusal} sign-in-failed, password-unsuitable */
  changePassword(caller: Caller, change: { current: string; new: string }, requestId: string): Promise<void>
}

export function createSessionService({ database, clock, audit, settings }: Dependencies): SessionService {
  const { Membership, Person, Session, Team } = database.models
  const passwords = createPasswords({ cost: settings.passwordCost })

  const memberships = (personId: string) => Membership.findAll({ where: { personId }, include: [{ model: Team, as: 'team' }], order: [['roleSince', 'ASC'], ['teamId', 'ASC']] })

  async function requirePerson(caller: Caller): Promise<{ caller: PersonCaller; person: Person }> {
    requireAction(caller, 'self')
    if (caller.kind !== 'person') throw new Refusal('insufficient-scope', 'No key may do this, only people signed in to the console.')
    return { caller, person: await Person.findByPk(caller.id, { rejectOnEmpty: true }) }
  }

  async function caller(personId: string, teamId: string | undefined, sessionId: string): Promise<PersonCaller | undefined> {
    const membership = await Membership.findOne({
      where: { personId, ...(teamId === undefined ? {} : { teamId }) },
      include: [{ model: Person, as: 'person', required: true }],
      order: [['roleSince', 'ASC'], ['teamId', 'ASC']],
    })
    if (membership === null) return undefined
    return { kind: 'person', teamId: membership.teamId, id: personId, name: membership.person!.name, role: membership.role, sessionId }
  }

  return {
    caller,

    async signIn({ email, password }, requestId) {
      const address = normalEmail(email)
      const found = await Person.findOne({ where: { email: address } })
      // The database also finds look-alikes (accents, characters without weight). Each would be another count of failed tries.
      const person = found?.email === address ? found : null
      const isRight = await passwords.matches(password, person?.passwordHash)
      const [membership] = isRight && person ? await memberships(person.id) : []
      if (!person || !membership) throw signInFailed()
      const { teamId, role } = membership
      await database.transaction((transaction) =>
        audit.record(transaction, {
          by: { kind: 'person', teamId, id: person.id, name: person.name, role, sessionId: '' },
          action: 'sign_in',
          subject: { kind: 'person', id: person.id, name: person.name },
          requestId,
        }),
      )
      return { personId: person.id, teamId }
    },

    async describe(asking, csrfToken) {
      const team = await Team.findByPk(asking.teamId, { rejectOnEmpty: true })
      const common = {
        team: { id: team.id, name: team.name },
        simulated: team.simulated,
        csrf_token: csrfToken,
        actions: allActions.filter((action) => mayDo(asking, action)),
      }
      if (asking.kind === 'key') {
        return { ...common, teams: [], person: null, role: null, key: { id: asking.id, name: asking.name }, scopes: [...asking.scopes] }
      }
      const [person, all] = await Promise.all([Person.findByPk(asking.id, { rejectOnEmpty: true }), memberships(asking.id)])
      return {
        ...common,
        teams: all.map((membership) => ({ id: membership.teamId, name: membership.team!.name, role: membership.role })),
        person: { id: person.id, name: person.name, email: person.email },
        role: asking.role,
        key: null,
        scopes: [],
      }
    },

    async requireMember(asking, teamId) {
      const { caller: person } = await requirePerson(asking)
      if ((await caller(person.id, teamId, person.sessionId)) === undefined) {
        throw new Refusal('not-found', 'You are in no team with this id. GET /v1/session lists your teams.')
      }
    },

    async recordSignOut(asking, requestId) {
      const { caller: person } = await requirePerson(asking)
      await database.transaction((transaction) =>
        audit.record(transaction, { by: person, action: 'sign_out', subject: { kind: 'person', id: person.id, name: person.name }, requestId }),
      )
    },

    async changePassword(asking, change, requestId) {
      const { caller: by, person } = await requirePerson(asking)
      if (!(await passwords.matches(change.current, person.passwordHash))) {
        throw signInFailed('The current password is not right.', [{ pointer: '/current', detail: 'This is not the current password.' }])
      }
      const team = await Team.findByPk(by.teamId, { rejectOnEmpty: true })
      requireSuitable(change.new, [person.email, person.name, team.name], '/new')
      const passwordHash = await passwords.hash(change.new)
      await database.transaction(async (transaction) => {
        await person.update({ passwordHash, passwordChangedAt: clock.now() }, { transaction })
        await Session.destroy({ where: { personId: { [Op.eq]: person.id } }, transaction })
        await audit.record(transaction, { by, action: 'change_password', subject: { kind: 'person', id: person.id, name: person.name }, requestId })
      })
    },
  }
}

function signInFailed(detail = 'E-mail and password do not match. Check both; an administrator can set a new password.', errors: Fault[] = []): Refusal {
  return new Refusal('sign-in-failed', detail, { errors, headers: { 'WWW-Authenticate': 'Session realm="heftwise"' } })
}

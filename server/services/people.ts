import { randomBytes } from 'node:crypto'
import type { Transaction } from 'sequelize'
import type { Dependencies } from '../dependencies.ts'
import { duplicateKey } from '../database/connection.ts'
import { uuid7 } from '../database/uuid7.ts'
import { createPasswords, requireSuitable } from './passwords.ts'
import type { Role } from './permissions.ts'

export interface PeopleService {
  findTeam(name: string): Promise<{ id: string; name: string } | undefined>
  createTeam(team: { name: string; simulated?: boolean }): Promise<{ id: string; name: string }>
  /**
   * Makes a person; one who is known by this e-mail address gets a role in another team and keeps the password.
   * @throws {Refusal} password-unsuitable
   */
  add(person: { teamId: string; email: string; name: string; role: Role; password: string }): Promise<{ id: string; isNew: boolean }>
}

export function createPeopleService({ database, clock, audit, settings }: Dependencies): PeopleService {
  const { Team, Person, Membership } = database.models
  const passwords = createPasswords({ cost: settings.passwordCost })

  async function findOrCreate(transaction: Transaction, person: { email: string; name: string; passwordHash: string }): Promise<{ id: string; isNew: boolean }> {
    const known = await Person.findOne({ where: { email: person.email }, transaction })
    if (known) return { id: known.id, isNew: false }
    const now = clock.now()
    const created = await Person.create({ id: uuid7(), ...person, passwordChangedAt: now, createdAt: now }, { transaction })
    return { id: created.id, isNew: true }
  }

  return {
    async findTeam(name) {
      const team = await Team.findOne({ where: { name } })
      return team ? { id: team.id, name: team.name } : undefined
    },

    async createTeam({ name, simulated = false }) {
      return database.transaction(async (transaction) => {
        const team = await Team.create({ id: uuid7(), name, simulated, createdAt: clock.now() }, { transaction })
        await audit.record(transaction, { by: 'system', teamId: team.id, action: 'create_team', subject: { kind: 'team', id: team.id, name } })
        return { id: team.id, name }
      })
    },

    async add({ teamId, email, name, role, password }) {
      const team = await Team.findByPk(teamId, { rejectOnEmpty: true })
      const address = normalEmail(email)
      requireSuitable(password, [address, name, team.name], '/password')
      const passwordHash = await passwords.hash(password)
      return database.transaction(async (transaction) => {
        const { id, isNew } = await findOrCreate(transaction, { email: address, name, passwordHash })
        try {
          await Membership.create({ teamId, personId: id, role, roleSince: clock.now() }, { transaction })
        } catch (error) {
          if (duplicateKey(error) === undefined) throw error
          throw new Error(`${address} is in team "${team.name}" already.`, { cause: error })
        }
        await audit.record(transaction, { by: 'system', teamId, action: 'add_member', subject: { kind: 'person', id, name }, after: { role } })
        return { id, isNew }
      })
    },
  }
}

/** E-mail addresses are compared without regard to case and to spaces around them. */
export function normalEmail(email: string): string {
  return email.trim().normalize('NFC').toLowerCase()
}

/** 120 random bits as six groups that can be read out and typed. */
export function generatePassword(): string {
  const alphabet = 'abcdefghijkmnpqrstuvwxyz23456789'
  const letters = [...randomBytes(24)].map((byte) => alphabet[byte & 31])
  return [0, 4, 8, 12, 16, 20].map((at) => letters.slice(at, at + 4).join('')).join('-')
}

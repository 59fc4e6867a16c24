import { chmodSync, existsSync, readFileSync, writeFileSync } from 'node:fs'
import { join } from 'node:path'
import type { Dependencies } from '../dependencies.ts'
import type { Services } from '../services/index.ts'
import { generatePassword } from '../services/people.ts'
import type { Caller, Role } from '../services/permissions.ts'

/** An invented pottery works; its arm and its recordings are simulated. */
const teamName = 'Lowfield Pottery (simulated)'

const people: readonly { name: string; role: Role }[] = [
  { name: 'Imke Sandvoss', role: 'administrator' },
  { name: 'Teodor Blaha', role: 'engineer' },
  { name: 'Runa Falk', role: 'operator' },
  { name: 'Noor Haddad', role: 'reviewer' },
]

export interface DemoCredentials {
  origin: string
  sign_ins: { email: string; password: string; role: Role }[]
  api_key: string
}

const credentialsFile = (folder: string) => join(folder, 'demo-credentials.json')

/** Makes the demo team and its people where the database holds no team yet. Answers who seeds its arms and models, if anybody is to. */
export async function prepareDemo({ settings, database }: Dependencies, services: Services, origin: string): Promise<Caller | undefined> {
  if (!settings.seedDemo) return undefined
  if ((await database.models.Team.count()) === 0) {
    const team = await services.people.createTeam({ name: teamName, simulated: true })
    const signIns: DemoCredentials['sign_ins'] = []
    for (const { name, role } of people) {
      const email = `${name.split(' ')[0]!.toLowerCase()}@lowfield.example.org`
      const password = generatePassword()
      await services.people.add({ teamId: team.id, email, name, role, password })
      signIns.push({ email, password, role })
    }
    const { secret } = await services.keys.createFor(team.id, { name: 'demo', scopes: ['predict', 'adapt', 'read', 'build', 'release'] })
    writeCredentials(settings.dataFolder, { origin, sign_ins: signIns, api_key: secret })
  }
  return seeder({ database })
}

/** The demo team's administrator, as long as the seeding has not been done to its end. */
async function seeder({ database }: Pick<Dependencies, 'database'>): Promise<Caller | undefined> {
  const { Team, Membership, Person, AuditEvent } = database.models
  const team = await Team.findOne({ where: { name: teamName, simulated: true } })
  if (team === null || (await AuditEvent.count({ where: { teamId: team.id, action: 'seed_demo' } })) > 0) return undefined
  const membership = await Membership.findOne({ where: { teamId: team.id, role: 'administrator' }, include: [{ model: Person, as: 'person' }] })
  if (membership === null) return undefined
  return { kind: 'person', teamId: team.id, id: membership.personId, name: membership.person!.name, role: 'administrator', sessionId: '' }
}

export async function recordSeeded({ database, audit }: Dependencies, caller: Caller): Promise<void> {
  await database.transaction((transaction) =>
    audit.record(transaction, { by: 'system', teamId: caller.teamId, action: 'seed_demo', subject: { kind: 'team', id: caller.teamId, name: teamName } }),
  )
}

/** The demo's sign-ins, their address brought up to date; undefined where this installation has no demo. */
export function demoCredentials(folder: string, origin: string): DemoCredentials | undefined {
  const file = credentialsFile(folder)
  if (!existsSync(file)) return undefined
  const credentials = JSON.parse(readFileSync(file, 'utf8')) as DemoCredentials
  if (credentials.origin !== origin) writeCredentials(folder, { ...credentials, origin })
  return { ...credentials, origin }
}

function writeCredentials(folder: string, credentials: DemoCredentials): void {
  writeFileSync(credentialsFile(folder), `${JSON.stringify(credentials, null, 2)}\n`, { mode: 0o600 })
  chmodSync(credentialsFile(folder), 0o600)
}

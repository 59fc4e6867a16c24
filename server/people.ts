import { createInterface } from 'node:readline/promises'
import { parseArgs } from 'node:util'
import { openDatabase } from './database/connection.ts'
import { migrate } from './database/migrator.ts'
import { startPrivateMariaDb } from './database/private-mariadb.ts'
import { createDependencies } from './dependencies.ts'
import { createServices } from './services/index.ts'
import { generatePassword } from './services/people.ts'
import type { Role } from './services/permissions.ts'
import { readSettings } from './settings.ts'
import { StartError } from './start-error.ts'

const roles: readonly Role[] = ['engineer', 'operator', 'reviewer', 'administrator']

const usage = `Adds a person to a team; the team is made when it does not exist.

  npm run people -- add --email ada@example.org --name "Ada Example" --role administrator --team "Press shop"

  --role       ${roles.join(', ')}
  --ask        ask for the password; without it one is made and printed once
`

/** Makes the first people of an installation, for whoever may use its data folder or database. */
async function main(): Promise<void> {
  const { values, positionals } = parseArgs({
    allowPositionals: true,
    options: { email: { type: 'string' }, name: { type: 'string' }, role: { type: 'string' }, team: { type: 'string' }, ask: { type: 'boolean' }, help: { type: 'boolean' } },
  })
  const { email, role, team: teamName, ask } = values
  if (values.help || positionals[0] !== 'add' || !email || !role || !teamName) {
    process.stdout.write(usage)
    process.exitCode = values.help ? 0 : 2
    return
  }
  if (!roles.includes(role as Role)) throw new StartError(`--role is "${role}"; it must be one of ${roles.join(', ')}.`)
  if (!/^[^\s@]+@[^\s@]+$/.test(email)) throw new StartError(`--email is "${email}", which is no e-mail address.`)
  const password = ask ? await askForPassword() : generatePassword()

  const settings = readSettings()
  const own = settings.databaseAddress ? undefined : await startPrivateMariaDb({ folder: `${settings.dataFolder}/mariadb` })
  const database = openDatabase(settings.databaseAddress ?? own!.address)
  try {
    await migrate(database)
    const { people } = createServices(createDependencies({ settings, database }))
    const team = (await people.findTeam(teamName)) ?? (await people.createTeam({ name: teamName }))
    const { isNew } = await people.add({ teamId: team.id, email, name: values.name ?? email.split('@')[0]!, role: role as Role, password })
    process.stdout.write(`${email} is ${role} in team "${team.name}".\n`)
    if (!isNew) process.stdout.write('This person was known already and keeps the password.\n')
    else if (!ask) process.stdout.write(`Password, shown this once: ${password}\n`)
  } finally {
    await database.close()
    // One that was running before us belongs to the server that uses it.
    if (own && !own.adopted) await own.stop()
  }
}

async function askForPassword(): Promise<string> {
  const lines = createInterface({ input: process.stdin, output: process.stdout })
  const password = await lines.question('Password: ')
  lines.close()
  return password
}

main().catch((error: unknown) => {
  process.stderr.write(`${error instanceof Error ? error.message : String(error)}\n`)
  process.exitCode = 1
})

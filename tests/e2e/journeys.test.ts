import type { Browser } from 'playwright-core'
import { afterAll, afterEach, beforeAll, beforeEach, describe, expect, it, vi } from 'vitest'
import { twoJointArm, twoJointCsv } from '../support/recording-csv.ts'
import { startTestServer, type TestServer, type TestTeam } from '../support/server.ts'
import { serveModel, simulatedMotion, type ServedModel } from '../support/served-model.ts'
import { axeFindings } from './support/accessibility.ts'
import { openPage, startBrowser, takePicture, type OpenPage } from './support/browser.ts'
import { buildConsole } from './support/build-console.ts'

// A browser beside a database on a busy machine of two cores is slow; a journey has many steps.
vi.setConfig({ testTimeout: 120_000 })

let server: TestServer
let team: TestTeam
let model: ServedModel
let chromium: Browser
let browser: OpenPage

beforeAll(async () => {
  await buildConsole()
  chromium = await startBrowser()
  server = await startTestServer()
  team = await server.createTeam('Kiln works')
  model = await serveModel(server, team.caller('administrator'), { joints: 3 })
})
afterAll(async () => {
  await chromium.close()
  await server.stop()
})

beforeEach(async () => {
  browser = await openPage(chromium)
})
afterEach(async () => {
  const { errors } = browser
  await browser.close()
  expect(errors).toEqual([])
})

type Role = Parameters<TestTeam['createPerson']>[0]

async function signIn(role: Role, path = '/'): Promise<void> {
  const person = await team.createPerson(role)
  const { page } = browser
  await page.goto(server.origin + path)
  await page.getByLabel('E-mail').fill(person.email)
  await page.getByLabel('Password', { exact: true }).fill(person.password)
  await page.getByRole('button', { name: 'Sign in' }).click()
  await page.getByRole('navigation', { name: 'Sections' }).waitFor()
}

describe('anybody', () => {
  it('signs in by keyboard alone, comes back to the page that was asked for, and signs out', async () => {
    const { page } = browser
    const person = await team.createPerson('engineer')

    await page.goto(`${server.origin}/models/${model.model}?view=releases`)
    await page.getByRole('heading', { name: 'Sign in' }).waitFor()
    await page.keyboard.type(person.email)
    await page.keyboard.press('Tab')
    await page.keyboard.type(person.password)
    await page.keyboard.press('Enter')
    await page.getByText('a test').first().waitFor()
    expect(new URL(page.url()).pathname + new URL(page.url()).search).toBe(`/models/${model.model}?view=releases`)

    await page.getByRole('button', { name: 'A engineer' }).press('Enter')
    await page.getByRole('menuitem', { name: 'Sign out' }).press('Enter')
    await page.getByRole('heading', { name: 'Sign in' }).waitFor()
    await page.goto(`${server.origin}/adaptations`)
    await page.getByRole('heading', { name: 'Sign in' }).waitFor()
  })

  it('is told what is wrong with a sign-in, and may look at the password', async () => {
    const { page } = browser
    await page.goto(server.origin)
    await page.getByRole('button', { name: 'Sign in' }).click()
    await page.getByText('Your e-mail address is needed.').waitFor()

    await page.getByLabel('E-mail').fill('nobody@example.org')
    await page.getByLabel('Password', { exact: true }).fill('not the right one')
    await page.getByRole('button', { name: 'Show password' }).click()
    expect(await page.getByLabel('Password', { exact: true }).getAttribute('type')).toBe('text')
    await page.getByRole('button', { name: 'Sign in' }).click()
    await page.getByRole('alert').filter({ hasText: 'do not match' }).waitFor()
    expect(await axeFindings(page)).toEqual([])
  })

  it('changes the password and signs in with the new one', async () => {
    const { page } = browser
    const person = await team.createPerson('reviewer')
    const next = 'quiet lantern over nine hills'
    const enter = async (password: string) => {
      await page.getByLabel('E-mail').fill(person.email)
      await page.getByLabel('Password', { exact: true }).fill(password)
      await page.getByRole('button', { name: 'Sign in' }).click()
      await page.getByRole('heading', { name: 'Overview' }).waitFor()
    }
    await page.goto(server.origin)
    await enter(person.password)

    await page.getByRole('button', { name: 'A reviewer' }).click()
    await page.getByRole('menuitem', { name: 'Change password…' }).click()
    const dialog = page.getByRole('dialog')
    await dialog.getByLabel('Password now').fill(person.password)
    await dialog.getByLabel('New password').fill('too short')
    await dialog.getByRole('button', { name: 'Change password' }).click()
    await dialog.getByText('At least 15 characters').waitFor()
    await dialog.getByLabel('New password').fill(next)
    expect(await axeFindings(page)).toEqual([])
    await dialog.getByRole('button', { name: 'Change password' }).click()
    await page.getByText('Your password is changed.').waitFor()

    await page.getByRole('button', { name: 'A reviewer' }).click()
    await page.getByRole('menuitem', { name: 'Sign out' }).click()
    await enter(next)
  })

  it('reaches the content by the skip link and folds the rail', async () => {
    const { page } = browser
    await signIn('reviewer')

    await page.evaluate(() => (document.activeElement as HTMLElement | null)?.blur())
    await page.keyboard.press('Tab')
    await page.keyboard.press('Enter')
    expect(await page.evaluate(() => document.activeElement?.id)).toBe('content')

    await page.getByRole('button', { name: 'Fold the sections' }).click()
    await page.reload()
    await page.getByRole('button', { name: 'Unfold the sections' }).waitFor()
  })
})

describe('an engineer', () => {
  it('releases a version with a reason and rolls it back', async () => {
    const { page } = browser
    const number = await model.addVersion(model.artefact)
    await signIn('engineer', `/models/${model.model}`)

    await page.getByRole('button', { name: `Release version ${number}` }).click()
    const dialog = page.getByRole('dialog', { name: `Release version ${number} of ${model.model}` })
    await dialog.getByRole('button', { name: 'Make version' }).click()
    await dialog.getByText('A few words are needed').waitFor()
    await dialog.getByLabel('Reason').fill('Better on the new gripper.')
    await takePicture(page, 'release-dialog')
    expect(await axeFindings(page)).toEqual([])
    await dialog.getByRole('button', { name: 'Make version' }).click()
    await page.getByText(`version ${number} live`, { exact: true }).waitFor()

    await page.getByRole('button', { name: 'Roll back…' }).click()
    await page.getByRole('dialog').getByLabel('Reason').fill('Elbow is off.')
    await page.getByRole('dialog').getByRole('button', { name: 'Roll back to version 1' }).click()
    await page.getByText('version 1 live', { exact: true }).waitFor()
    await page.getByRole('tab', { name: 'Releases' }).click()
    await page.getByText('Elbow is off.').waitFor()
  })

  it('is shown what somebody else released meanwhile, and decides on that', async () => {
    const { page } = browser
    const [mine, theirs] = [await model.addVersion(model.artefact), await model.addVersion(model.artefact)]
    await signIn('engineer', `/models/${model.model}`)
    await page.getByRole('button', { name: `Release version ${mine}` }).click()
    const dialog = page.getByRole('dialog')
    await dialog.getByLabel('Reason').fill('Mine is better.')

    await model.release(theirs)
    await dialog.getByRole('button', { name: 'Make version' }).click()
    await dialog.getByText('It has changed while you were deciding').waitFor()
    await dialog.getByText(`released version ${theirs}`).waitFor()
    await takePicture(page, 'release-conflict')
    expect(await axeFindings(page)).toEqual([])
    await dialog.getByRole('button', { name: 'Decide on that' }).click()
    await dialog.getByRole('button', { name: 'Make version' }).click()

    await page.getByText(`version ${mine} live`, { exact: true }).waitFor()
  })

  it('uploads recordings, starts a model, fits it and finds the version with its figures', async () => {
    const { page } = browser
    const build = await team.createKey(['build'])
    expect((await build.post('/v1/arms', twoJointArm('bench-2'))).status).toBe(201)
    const files = Array.from({ length: 5 }, (_, number) => ({
      name: `bench-${number + 1}.csv`,
      mimeType: 'text/csv',
      buffer: Buffer.from(twoJointCsv({ seed: number + 1 })),
    }))
    await signIn('engineer', '/recordings')

    await page.getByRole('button', { name: 'Upload…' }).click()
    const dialog = page.getByRole('dialog')
    await dialog.getByLabel('Arm').selectOption('bench-2')
    await dialog
      .getByLabel('Files')
      .setInputFiles([...files, { name: 'broken.csv', mimeType: 'text/csv', buffer: Buffer.from('time,position_swivel\n0,1\n') }])
    await takePicture(page, 'upload-dialog')
    expect(await axeFindings(page)).toEqual([])
    await dialog.getByRole('button', { name: 'Upload' }).click()
    await dialog.getByRole('alert').waitFor()
    await takePicture(page, 'upload-refused')
    await dialog.getByRole('button', { name: 'Close' }).last().click()
    await page.getByText('bench-5.csv').waitFor()

    await page.getByRole('link', { name: 'Models' }).click()
    await page.getByRole('button', { name: 'Start a model…' }).click()
    await dialog.getByLabel('Name').fill('Bench 2')
    await dialog.getByRole('button', { name: 'Start model' }).click()
    await dialog.getByText('Only small letters, digits and hyphens.').waitFor()
    await dialog.getByLabel('Name').fill('bench-2-base')
    await dialog.getByLabel('Arm').selectOption('bench-2')
    await dialog.getByRole('button', { name: 'Start model' }).click()
    await page.getByText('No version yet').waitFor()

    await page.getByRole('link', { name: 'Jobs', exact: true }).click()
    await page.getByRole('button', { name: 'Fit…' }).click()
    await dialog.getByLabel('Model').selectOption('bench-2-base')
    await dialog.getByLabel('Hidden layers').fill('8')
    await dialog.getByLabel('Epochs').fill('3')
    await takePicture(page, 'fit-dialog')
    expect(await axeFindings(page)).toEqual([])
    await dialog.getByRole('button', { name: 'Start fitting' }).click()
    await page.getByRole('heading', { name: 'Fitting of bench-2-base' }).waitFor()
    const made = page.getByRole('link', { name: 'version 1 of bench-2-base' })
    await made.waitFor({ timeout: 100_000 })
    await takePicture(page, 'job-done')
    expect(await axeFindings(page)).toEqual([])
    await made.click()

    await page.getByRole('table', { name: 'Error per joint' }).getByRole('row', { name: /^lift/ }).waitFor()
    await takePicture(page, 'fitted-version')
  })

  it('finds no keys section', async () => {
    const { page } = browser
    await signIn('engineer')

    expect(await page.getByRole('link', { name: 'Keys' }).count()).toBe(0)
    await page.goto(`${server.origin}/keys`)
    await page.getByText('Keys are the administrator’s').waitFor()
  })
})

describe('an operator', () => {
  it('watches an adaptation live, freezes, resumes and resets it, each with a reason', async () => {
    const { page } = browser
    const key = await team.createKey(['adapt'])
    const { body: adaptation } = await key.post('/v1/adaptations', {
      model: model.model,
      loss: 'mse',
      robot: 'cart-1',
      context: { tool: 'gripper' },
    })
    let sequence = 0
    const post = async () => {
      const rows = 64
      const motion = simulatedMotion({ joints: 3, rows, start: (sequence * rows) / 50, seed: 3, payload: 0.4 })
      const batch = { joints: model.fingerprint, sequence: ++sequence, acceleration_kind: 'measured', ...motion }
      const send = () => key.post(`/v1/adaptations/${adaptation.id}/batches`, batch)
      // A kept-alive connection may be closed just as it is used again; a batch may be repeated.
      const answer = await send().catch(send)
      expect(answer.status, JSON.stringify(answer.body)).toBe(200)
    }
    for (let batch = 0; batch < 5; batch++) await post()
    await signIn('operator')

    await page.getByRole('link', { name: 'cart-1' }).first().click()
    await page.getByText('sequence 5:').waitFor()
    await post()
    await page.getByText('sequence 6:').waitFor()
    await page.getByRole('img', { name: /^joint-1: predicted .* measured .* limit/ }).waitFor()

    await page.getByRole('button', { name: 'Freeze…' }).click()
    await page.getByRole('dialog').getByLabel('Reason').fill('Gripper is being changed.')
    await takePicture(page, 'freeze-dialog')
    await page.getByRole('dialog').getByRole('button', { name: 'Freeze', exact: true }).click()
    await page.getByText('Frozen by A operator: Gripper is being changed.').waitFor()
    await post()
    await page.getByText('sequence 7: stored').waitFor()

    await page.getByRole('button', { name: 'Resume…' }).click()
    await page.getByRole('dialog').getByLabel('Reason').fill('The new one is on.')
    await page.getByRole('dialog').getByRole('button', { name: 'Resume', exact: true }).click()
    await page.getByRole('button', { name: 'Freeze…' }).waitFor()

    await page.getByRole('button', { name: 'Reset…' }).click()
    await page.getByRole('dialog').getByLabel('Reason').fill('Start again with it.')
    await page.getByRole('dialog').getByRole('button', { name: 'Reset', exact: true }).click()
    await page.getByText(`serves version ${adaptation.version} of tinker again`).waitFor()
    expect(await page.getByRole('button', { name: 'Promote…' }).count()).toBe(0)

    await page.getByLabel('Entry').selectOption('command')
    await page.getByText('Start again with it.').waitFor()
    await expect
      .poll(() => page.getByRole('list', { name: 'Log entries' }).getByRole('listitem').count(), { timeout: 15_000 })
      .toBe(3)
    await page.reload()
    await page.getByText('Start again with it.').waitFor()
    expect(await page.getByLabel('Entry').inputValue()).toBe('command')
    await takePicture(page, 'operator-adaptation')
    expect(await axeFindings(page)).toEqual([])
  })

  it('can’t release, and is told why', async () => {
    const { page } = browser
    await model.addVersion(model.artefact)
    await signIn('operator', `/models/${model.model}`)
    const release = page.getByRole('button', { name: /^Release version/ }).first()

    await release.hover()
    await page.getByRole('tooltip').filter({ hasText: 'As operator you can’t release versions' }).waitFor()
    await release.click({ force: true })
    expect(await page.getByRole('dialog').count()).toBe(0)
  })
})

describe('an administrator', () => {
  it('creates a key, sees its secret once, rotates it with an overlap and revokes it', async () => {
    const { page, context } = browser
    await context.grantPermissions(['clipboard-read', 'clipboard-write'])
    await signIn('administrator', '/keys')

    await page.getByRole('button', { name: 'Create key…' }).click()
    const dialog = page.getByRole('dialog')
    await dialog.getByRole('button', { name: 'Create key' }).click()
    await dialog.getByText('Name it after').waitFor()
    await dialog.getByLabel('Name').fill('kiln cell controller')
    await dialog.getByLabel('adapt').check()
    await takePicture(page, 'create-key-dialog')
    expect(await axeFindings(page)).toEqual([])
    await dialog.getByRole('button', { name: 'Create key' }).click()
    const first = (await dialog.getByTestId('secret').textContent())!
    expect((await server.api(first).get('/v1/session')).body.scopes).toEqual(['predict', 'adapt'])
    await dialog.getByRole('button', { name: 'Copy secret' }).click()
    await dialog.getByText('Copied').waitFor()
    expect(await page.evaluate(() => navigator.clipboard.readText())).toBe(first)
    await page.keyboard.press('Escape')
    await dialog.getByRole('button', { name: 'Done' }).click({ force: true })
    expect(await dialog.count()).toBe(1)
    await takePicture(page, 'secret-dialog')
    await dialog.getByLabel('I have stored it').check()
    await dialog.getByRole('button', { name: 'Done' }).click()

    await page.getByRole('button', { name: 'Rotate key kiln cell controller' }).click()
    await dialog.getByLabel('Overlap').selectOption({ label: '1 hour' })
    await dialog.getByRole('button', { name: 'Rotate' }).click()
    const second = (await dialog.getByTestId('secret').textContent())!
    await dialog.getByLabel('I have stored it').check()
    await dialog.getByRole('button', { name: 'Done' }).click()
    expect(second).not.toBe(first)
    expect((await server.api(first).get('/v1/session')).status).toBe(200)
    await page.getByText('old secret ends').waitFor()

    await page.getByRole('button', { name: 'Revoke key kiln cell controller' }).click()
    await dialog.getByLabel('Reason').fill('The cell is taken down.')
    await dialog.getByRole('button', { name: 'Revoke', exact: true }).click()
    await page.getByRole('cell', { name: 'revoked' }).waitFor()
    expect((await server.api(second).get('/v1/session')).status).toBe(401)
    expect(await page.content()).not.toContain(second)
  })
})

import type { Browser } from 'playwright-core'
import { afterAll, afterEach, beforeAll, beforeEach, describe, expect, it, vi } from 'vitest'
import { axeFindings } from './support/accessibility.ts'
import { openPage, startBrowser, takePicture, type OpenPage } from './support/browser.ts'
import { buildConsole } from './support/build-console.ts'
import { problem, startInventedApi, type InventedApi } from './support/invented-api.ts'
import { inventTeam } from './support/invented-team.ts'

// A browser beside a database on a busy machine of two cores is slow; a journey has many steps.
vi.setConfig({ testTimeout: 120_000 })

let browser: Browser
let api: InventedApi
let open: OpenPage

beforeAll(async () => {
  await buildConsole()
  browser = await startBrowser()
})
afterAll(() => browser.close())

beforeEach(async () => {
  api = await startInventedApi(inventTeam(Date.now()))
  open = await openPage(browser)
})
afterEach(async () => {
  const { errors } = open
  await open.close()
  await api.close()
  expect(errors).toEqual([])
})

const lists: { path: string; of: string; empty: string; failed: string }[] = [
  { path: '/adaptations', of: '/v1/adaptations', empty: 'No adaptation yet', failed: 'The adaptations could not be read' },
  { path: '/models', of: '/v1/models', empty: 'No model yet', failed: 'The models could not be read' },
  { path: '/losses', of: '/v1/losses', empty: 'No learned loss yet', failed: 'The losses could not be read' },
  { path: '/arms', of: '/v1/arms', empty: 'No arm yet', failed: 'The arms could not be read' },
  { path: '/recordings', of: '/v1/recordings', empty: 'No recording yet', failed: 'The recordings could not be read' },
  { path: '/jobs', of: '/v1/jobs', empty: 'No job yet', failed: 'The jobs could not be read' },
  { path: '/keys', of: '/v1/keys', empty: 'No key yet', failed: 'The keys could not be read' },
]

describe.each(lists)('$path', ({ path, of, empty, failed }) => {
  it('says what to do next while there is nothing', async () => {
    const { page } = open
    api.overrides.set(`GET ${of}`, (_req, res) =>
      res.writeHead(200, { 'content-type': 'application/json' }).end('{"items":[],"next_cursor":null}'),
    )

    await page.goto(api.origin + path)
    await page.getByText(empty).waitFor()

    await takePicture(page, `empty${path.replace('/', '-')}`)
    expect(await axeFindings(page)).toEqual([])
  })

  it('shows what failed, and goes on when it is tried again', async () => {
    const { page } = open
    api.overrides.set(`GET ${of}`, (_req, res) =>
      problem(res, 500, 'internal', 'Something went wrong on our side', 'Try again; if it stays, send us the request id.'),
    )

    await page.goto(api.origin + path)
    await page.getByText(failed).waitFor()
    await page.getByText('0193a5c2-7d1e').waitFor()
    await takePicture(page, `failed${path.replace('/', '-')}`)
    expect(await axeFindings(page)).toEqual([])
    api.overrides.clear()
    await page.getByRole('button', { name: 'Try again' }).click()

    await page.getByRole('table').waitFor()
  })
})

it('a list keeps its filters, sort and page in the address', async () => {
  const { page } = open
  await page.goto(`${api.origin}/adaptations`)

  await page.getByLabel('State').selectOption('adapting')
  await page.getByLabel('Robot, tool, payload').fill('rack')
  await page.getByRole('button', { name: 'Started' }).click()
  await page.reload()
  await page.getByRole('table').waitFor()

  expect(new URL(page.url()).search).toBe('?state=adapting&text=rack&sort=started')
  expect(await page.getByRole('row').count()).toBe(3)
  expect(await page.getByRole('columnheader', { name: 'Started' }).getAttribute('aria-sort')).toBe('ascending')
})

it('an adaptation says since when the service has not answered, keeps what it showed, and recovers by itself', async () => {
  const { page } = open
  const { id } = api.team.adaptations[0]!
  await page.goto(`${api.origin}/adaptations/${id}`)
  await page.getByText('Over the batch').waitFor()

  api.overrides.set(`GET /v1/adaptations/${id}`, (_req, res) =>
    problem(res, 503, 'not-ready', 'The service is not ready', 'Try again in a moment.'),
  )
  await page.getByText('The service has not answered for').waitFor()
  await takePicture(page, 'unanswered-adaptation')
  expect(await page.getByText('Over the batch').count()).toBe(1)
  api.overrides.clear()

  await page.getByText('The service has not answered for').waitFor({ state: 'detached' })
})

it('an adaptation that does not exist, or is another team’s, is said not to be there', async () => {
  const { page } = open

  await page.goto(`${api.origin}/adaptations/0193a5c2-7d1e-7cc0-a400-999999999999`)

  await page.getByText('This adaptation could not be read').waitFor()
})

it('a session that ends on the server leads to the sign-in page and knows the way back', async () => {
  const { page } = open
  await page.goto(`${api.origin}/jobs`)
  await page.getByRole('table').waitFor()

  const ended = (_req: unknown, res: Parameters<typeof problem>[0]) =>
    problem(res, 401, 'unauthenticated', 'Credentials are needed', 'Sign in.')
  api.overrides.set('GET /v1/jobs', ended)
  api.overrides.set('GET /v1/session', ended)

  await page.getByRole('heading', { name: 'Sign in' }).waitFor()
  expect(new URL(page.url()).search).toBe('?next=%2Fjobs')
})

describe('sign-in', () => {
  beforeEach(() => {
    api.overrides.set('GET /v1/session', (_req, res) =>
      problem(res, 401, 'unauthenticated', 'Credentials are needed', 'Sign in.'),
    )
  })

  it.each([
    { theme: 'light', width: 1440 },
    { theme: 'dark', width: 1440 },
    { theme: 'light', width: 390 },
    { theme: 'dark', width: 390 },
  ] as const)('is free of accessibility findings in the $theme theme at $width px', async ({ theme, width }) => {
    const { page, close } = await openPage(browser, { theme, width })

    await page.goto(api.origin)
    await page.getByRole('heading', { name: 'Sign in' }).waitFor()
    await takePicture(page, `sign-in-${theme}-${width}`)

    expect(await axeFindings(page)).toEqual([])
    await close()
  })

  it('counts down while the service wants no further try', async () => {
    const { page } = open
    api.overrides.set('POST /v1/session', (_req, res) =>
      problem(res, 429, 'rate-limited', 'Too many requests', 'Too many tries. Wait a little.', { 'retry-after': '3' }),
    )
    await page.goto(api.origin)

    await page.getByLabel('E-mail').fill('mara.quint@kiln.example')
    await page.getByLabel('Password', { exact: true }).fill('some long password')
    await page.getByRole('button', { name: 'Sign in' }).click()
    await page.getByRole('button', { name: /^Again in/ }).waitFor()
    await takePicture(page, 'sign-in-throttled')

    await page.getByRole('button', { name: 'Sign in', exact: true }).waitFor()
  })

  it('never follows a way back to another site', async () => {
    const { page } = open
    api.overrides.delete('GET /v1/session')

    await page.goto(`${api.origin}/sign-in?next=//elsewhere.example/`)
    await page.getByRole('heading', { name: 'Overview' }).waitFor()

    expect(new URL(page.url()).origin).toBe(api.origin)
  })
})

it('the error chart is read by keyboard, batch by batch, and opens the rows of one', async () => {
  const { page } = open
  const { id } = api.team.adaptations[0]!
  await page.goto(`${api.origin}/adaptations/${id}`)
  const chart = page.getByRole('slider', { name: 'Error per batch' })

  await chart.focus()
  await chart.press('ArrowLeft')
  await chart.press('ArrowLeft')
  const sequence = await chart.getAttribute('aria-valuenow')
  await chart.press('Enter')

  await page.getByRole('heading', { name: `Joints, batch ${sequence}` }).waitFor()
  expect(new URL(page.url()).searchParams.get('batch')).not.toBeNull()
  await page.getByRole('button', { name: 'Follow the newest' }).click()
  await page.getByRole('heading', { name: 'Joints, newest batch' }).waitFor()
})

it('the theme is chosen in the menu and kept', async () => {
  const { page } = open
  await page.goto(api.origin)

  await page.getByRole('button', { name: 'Mara Quint' }).click()
  await page.getByRole('menuitemradio', { name: 'Dark' }).click()
  await page.reload()
  await page.getByRole('heading', { name: 'Overview' }).waitFor()

  expect(await page.evaluate(() => getComputedStyle(document.documentElement).backgroundColor)).toBe('rgb(20, 24, 22)')
})

it('a narrow screen reaches every section through the menu', async () => {
  const { page, close } = await openPage(browser, { width: 390, height: 844 })
  await page.goto(api.origin)

  await page.getByRole('button', { name: 'Sections' }).click()
  await takePicture(page, 'drawer-390')
  await page.getByRole('link', { name: 'Models' }).click()

  await page.getByRole('heading', { name: 'Models' }).waitFor()
  await close()
})

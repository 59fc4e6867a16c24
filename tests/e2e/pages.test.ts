import type { Browser } from 'playwright-core'
import { afterAll, beforeAll, describe, expect, it, vi } from 'vitest'
import { axeFindings } from './support/accessibility.ts'
import { openPage, startBrowser, takePicture, type OpenPage } from './support/browser.ts'
import { buildConsole } from './support/build-console.ts'
import { startInventedApi, type InventedApi } from './support/invented-api.ts'
import { inventTeam } from './support/invented-team.ts'

// A browser beside a database on a busy machine of two cores is slow; a journey has many steps.
vi.setConfig({ testTimeout: 120_000 })

const team = inventTeam(Date.now())
const frozen = team.adaptations.find((adaptation) => adaptation.state === 'frozen')!

const pages: { name: string; path: string; ready: string }[] = [
  { name: 'overview', path: '/', ready: 'Needs attention' },
  { name: 'adaptations', path: '/adaptations', ready: 'glaze-line-loader' },
  { name: 'adaptation', path: `/adaptations/${team.adaptations[0]!.id}`, ready: 'Over the batch' },
  { name: 'adaptation-frozen', path: `/adaptations/${frozen.id}`, ready: 'Over the batch' },
  { name: 'models', path: '/models', ready: 'rowan-6-base' },
  { name: 'model', path: '/models/alder-7-base?version=4', ready: 'Error per joint' },
  { name: 'model-releases', path: '/models/alder-7-base?view=releases', ready: 'To start with.' },
  { name: 'losses', path: '/losses', ready: 'alder-7-payload' },
  { name: 'loss', path: '/losses/alder-7-payload', ready: 'Next-batch error by loss' },
  { name: 'arms', path: '/arms', ready: 'rowan-6' },
  { name: 'arm', path: '/arms/alder-7', ready: 'Copy fingerprint' },
  { name: 'recordings', path: '/recordings', ready: 'carts-slow-1.csv' },
  { name: 'jobs', path: '/jobs', ready: 'Fitting of alder-7-base' },
  { name: 'job', path: `/jobs/${team.jobs[0]!.id}`, ready: 'against update' },
  { name: 'keys', path: '/keys', ready: 'kiln cell controller' },
  { name: 'not-found', path: '/nowhere', ready: 'nothing at this address' },
]

describe.each(['light', 'dark'] as const)('in the %s theme', (theme) => {
  describe.each([1440, 390])('%i px wide', (width) => {
    let api: InventedApi
    let browser: Browser
    let open: OpenPage

    beforeAll(async () => {
      await buildConsole()
      api = await startInventedApi(team)
      browser = await startBrowser()
      open = await openPage(browser, { width, height: width === 390 ? 844 : 900, theme })
    })
    afterAll(async () => {
      await browser.close()
      await api.close()
    })

    it.each(pages)(
      '$name is free of accessibility findings and console errors, and fits the width',
      async ({ name, path, ready }) => {
        const { page, errors } = open

        await page.goto(api.origin + path)
        await page
          .getByText(ready)
          .or(page.getByRole('table', { name: ready }))
          .first()
          .waitFor()
        await page.evaluate(() => document.fonts.ready)
        await takePicture(page, `${name}-${theme}-${width}`)

        expect(await axeFindings(page)).toEqual([])
        expect(await page.evaluate(() => document.documentElement.scrollWidth - document.documentElement.clientWidth)).toBe(0)
        expect(errors).toEqual([])
      },
    )
  })
})

import { mkdtemp, mkdir, rm } from 'node:fs/promises'
import { tmpdir } from 'node:os'
import { join } from 'node:path'
import { chromium, type BrowserContext, type Page } from 'playwright-core'

const flags = [
  '--headless',
  '--no-sandbox',
  '--disable-gpu',
  '--disable-quic',
  '--no-first-run',
  '--disable-background-networking',
  '--disable-component-update',
  '--disable-sync',
]

export interface OpenBrowser {
  page: Page
  context: BrowserContext
  /** What went wrong in the page unasked: console errors and exceptions. Clear what a test brings about on purpose. */
  errors: string[]
  close: () => Promise<void>
}

export interface Look {
  width?: number
  height?: number
  theme?: 'light' | 'dark'
}

/** A fresh browser with an empty profile. */
export async function openBrowser({ width = 1440, height = 900, theme = 'light' }: Look = {}): Promise<OpenBrowser> {
  const profile = await mkdtemp(join(tmpdir(), 'heftwise-e2e-'))
  const context = await chromium.launchPersistentContext(profile, {
    executablePath: process.env.CHROMIUM ?? '/usr/bin/chromium',
    args: flags,
    viewport: { width, height },
    colorScheme: theme,
    reducedMotion: 'reduce',
    locale: 'en-GB',
    timezoneId: 'Europe/Berlin',
  })
  const page = context.pages()[0] ?? (await context.newPage())
  page.setDefaultTimeout(10_000)
  const errors: string[] = []
  page.on('pageerror', (error) => errors.push(String(error)))
  page.on('console', (message) => {
    // The browser itself notes each 4xx answer; what the page makes of it is tested where it shows.
    if (message.type() === 'error' && !message.text().startsWith('Failed to load resource')) errors.push(message.text())
  })
  return {
    page,
    context,
    errors,
    close: async () => {
      await context.close()
      await rm(profile, { recursive: true, force: true })
    },
  }
}

const output = new URL('../../output/', import.meta.url)

/** A picture for a person to look at, in tests/output. */
export async function takePicture(page: Page, name: string): Promise<void> {
  await mkdir(output, { recursive: true })
  await page.screenshot({ path: new URL(`${name}.png`, output).pathname, fullPage: true })
}

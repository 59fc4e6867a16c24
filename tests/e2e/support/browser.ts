import { mkdir } from 'node:fs/promises'
import { chromium, type Browser, type BrowserContext, type Page } from 'playwright-core'

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

export interface OpenPage {
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

/** One browser with an empty profile of its own; each test gets a fresh context in it. */
export async function startBrowser(): Promise<Browser> {
  return chromium.launch({ executablePath: process.env.CHROMIUM ?? '/usr/bin/chromium', args: flags })
}

export async function openPage(browser: Browser, { width = 1440, height = 900, theme = 'light' }: Look = {}): Promise<OpenPage> {
  const context = await browser.newContext({
    viewport: { width, height },
    colorScheme: theme,
    reducedMotion: 'reduce',
    locale: 'en-GB',
    timezoneId: 'Europe/Berlin',
  })
  const page = await context.newPage()
  page.setDefaultTimeout(30_000)
  const errors: string[] = []
  page.on('pageerror', (error) => errors.push(String(error)))
  page.on('console', (message) => {
    // The browser itself notes each 4xx answer; what the page makes of it is tested where it shows.
    if (message.type() === 'error' && !message.text().startsWith('Failed to load resource')) errors.push(message.text())
  })
  return { page, context, errors, close: () => context.close() }
}

const output = new URL('../../output/', import.meta.url)

/** A picture for a person to look at, in tests/output. */
export async function takePicture(page: Page, name: string): Promise<void> {
  await mkdir(output, { recursive: true })
  await page.screenshot({ path: new URL(`${name}.png`, output).pathname, fullPage: true })
}

import { readFile } from 'node:fs/promises'
import { createRequire } from 'node:module'
import type { Page } from 'playwright-core'

let source: string | undefined

/** What axe finds against WCAG 2.2 A and AA on the page as it is, one line each. */
export async function axeFindings(page: Page): Promise<string[]> {
  source ??= await readFile(createRequire(import.meta.url).resolve('axe-core/axe.min.js'), 'utf8')
  // Evaluated by the debugger, so the page's content security policy stays as it is.
  await page.evaluate(source)
  return page.evaluate(async () => {
    const { axe } = window as unknown as {
      axe: {
        run: (
          options: object,
        ) => Promise<{ violations: { id: string; help: string; nodes: { html: string; failureSummary: string }[] }[] }>
      }
    }
    const { violations } = await axe.run({ runOnly: ['wcag2a', 'wcag2aa', 'wcag21a', 'wcag21aa', 'wcag22aa', 'best-practice'] })
    return violations.flatMap((violation) =>
      violation.nodes.map((node) => `${violation.id}: ${node.html.slice(0, 160)} ${node.failureSummary.replaceAll('\n', ' ')}`),
    )
  })
}

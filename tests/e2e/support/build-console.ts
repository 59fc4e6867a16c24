import { existsSync, statSync } from 'node:fs'
import { readdir } from 'node:fs/promises'
import { fileURLToPath } from 'node:url'
import { build } from 'vite'

const console_ = fileURLToPath(new URL('../../../console/', import.meta.url))
const others = ['../../../fonts/', '../../../sdk/', '../../../shared/contract/'].map((path) =>
  fileURLToPath(new URL(path, import.meta.url)),
)

/** Builds the console unless the build is newer than everything it is made of. */
export async function buildConsole(): Promise<void> {
  const index = `${console_}dist/index.html`
  const built = existsSync(index) ? statSync(index).mtimeMs : 0
  const newest = Math.max(...(await Promise.all([console_, ...others].map(newestIn))))
  if (built > newest) return
  await build({
    configFile: fileURLToPath(new URL('../../../vite.config.ts', import.meta.url)),
    root: console_,
    logLevel: 'error',
  })
}

async function newestIn(folder: string): Promise<number> {
  const entries = await readdir(folder, { recursive: true, withFileTypes: true })
  const files = entries.filter((entry) => entry.isFile() && !entry.parentPath.includes('/dist'))
  return Math.max(0, ...files.map((entry) => statSync(`${entry.parentPath}/${entry.name}`).mtimeMs))
}

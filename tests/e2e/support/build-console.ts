import { execFile } from 'node:child_process'
import { existsSync, statSync } from 'node:fs'
import { readdir } from 'node:fs/promises'
import { fileURLToPath } from 'node:url'
import { promisify } from 'node:util'

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
  // A process of its own: the test runner's NODE_ENV would make it a development build.
  await promisify(execFile)(process.execPath, ['node_modules/vite/bin/vite.js', 'build', '--logLevel', 'error'], {
    cwd: fileURLToPath(new URL('../../../', import.meta.url)),
    env: { ...process.env, NODE_ENV: 'production' },
  })
}

async function newestIn(folder: string): Promise<number> {
  const entries = await readdir(folder, { recursive: true, withFileTypes: true })
  const files = entries.filter((entry) => entry.isFile() && !entry.parentPath.includes('/dist'))
  return Math.max(0, ...files.map((entry) => statSync(`${entry.parentPath}/${entry.name}`).mtimeMs))
}

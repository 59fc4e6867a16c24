// Copies the typefaces that the console ships, with their licences, out of the pinned packages: `node fonts/update.mjs`.
import { copyFile } from 'node:fs/promises'

const here = new URL('.', import.meta.url)
const modules = new URL('../node_modules/', import.meta.url)

const files = {
  'archivo-latin.woff2': '@fontsource-variable/archivo/files/archivo-latin-wdth-normal.woff2',
  'archivo-latin-ext.woff2': '@fontsource-variable/archivo/files/archivo-latin-ext-wdth-normal.woff2',
  'archivo-licence.txt': '@fontsource-variable/archivo/LICENSE',
  'jetbrains-mono-latin-400.woff2': '@fontsource/jetbrains-mono/files/jetbrains-mono-latin-400-normal.woff2',
  'jetbrains-mono-latin-600.woff2': '@fontsource/jetbrains-mono/files/jetbrains-mono-latin-600-normal.woff2',
  'jetbrains-mono-latin-ext-400.woff2': '@fontsource/jetbrains-mono/files/jetbrains-mono-latin-ext-400-normal.woff2',
  'jetbrains-mono-licence.txt': '@fontsource/jetbrains-mono/LICENSE',
}

for (const [name, from] of Object.entries(files)) await copyFile(new URL(from, modules), new URL(name, here))

// Compiles the SIMD kernels to WebAssembly and writes them, as base64, into kernels.generated.ts. Does nothing when the
// generated file was made from the same sources by the same compiler, so that starting the product stays quick.
import { createHash } from 'node:crypto'
import { existsSync, readdirSync, readFileSync, renameSync, writeFileSync } from 'node:fs'
import { createRequire } from 'node:module'
import { fileURLToPath } from 'node:url'

const folder = fileURLToPath(new URL('.', import.meta.url))
const generated = `${folder}kernels.generated.ts`
const sources = readdirSync(`${folder}source`).filter((name) => name.endsWith('.ts')).sort()
const compiler = createRequire(import.meta.url)('assemblyscript/package.json').version

const hash = createHash('sha256').update(compiler).update(readFileSync(fileURLToPath(import.meta.url)))
for (const name of sources) hash.update(name).update(readFileSync(`${folder}source/${name}`))
const fingerprint = hash.digest('hex')

if (existsSync(generated) && readFileSync(generated, 'utf8').includes(fingerprint)) process.exit(0)

const { default: asc } = await import('assemblyscript/asc')
let binary
const { error, stderr } = await asc.main(
  [
    'index.ts', '--outFile', 'kernels.wasm', '--enable', 'simd', '--runtime', 'stub', '-O3', '--noAssert', '--converge',
    // Nothing here allocates or throws, so the module imports nothing.
    '--use', 'abort=',
  ],
  {
    readFile: (name) => (sources.includes(name) ? readFileSync(`${folder}source/${name}`, 'utf8') : null),
    writeFile: (name, contents) => {
      if (name === 'kernels.wasm') binary = contents
    },
    listFiles: () => [],
  },
)
if (error) {
  console.error(stderr.toString())
  console.error(`The kernels did not compile: ${error.message}`)
  process.exit(1)
}

const text = `// Written by build.mjs from source/; not committed.
export const fingerprint = '${fingerprint}'
export const wasm =
  '${Buffer.from(binary).toString('base64')}'
`
// Two starts at once may both compile; a rename never leaves a half-written file for the other to import.
writeFileSync(`${generated}.${process.pid}`, text)
renameSync(`${generated}.${process.pid}`, generated)
console.log(`Kernels compiled: ${binary.length} bytes of WebAssembly.`)

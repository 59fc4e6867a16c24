import { readdirSync, readFileSync } from 'node:fs'
import { dirname, join, normalize, relative } from 'node:path'
import { describe, expect, test } from 'vitest'

/** Reads every import of the source and holds the direction in which parts may know each other. */
interface Import {
  from: string
  to: string
  isType: boolean
}

const root = process.cwd()

function sources(folder: string): string[] {
  return readdirSync(join(root, folder), { withFileTypes: true }).flatMap((entry) => {
    const path = `${folder}/${entry.name}`
    if (entry.isDirectory()) return ['node_modules', 'dist', 'source'].includes(entry.name) ? [] : sources(path)
    return /\.(ts|tsx|mjs)$/.test(entry.name) && !entry.name.includes('.generated.') ? [path] : []
  })
}

const files = ['shared', 'server', 'sdk', 'console'].flatMap(sources)

const imports: Import[] = files.flatMap((from) => {
  const text = readFileSync(join(root, from), 'utf8')
  const found = [
    ...text.matchAll(/^(?:import|export)\s+(type\s+)?(?:[^'"();]*?from\s+)?'([^']+)'/gm),
    ...text.matchAll(/()import\(\s*'([^']+)'\s*\)/g),
    ...text.matchAll(/()new URL\('(\.[^']+\.[a-z]+)', import\.meta\.url\)/g),
  ]
  return found.map(([, type, specifier]) => ({
    from,
    to: specifier!.startsWith('.') ? relative(root, normalize(join(root, dirname(from), specifier!))) : specifier!,
    isType: Boolean(type),
  }))
})

const inside = (folder: string) => ({ from }: Import) => from.startsWith(`${folder}/`)
const isLocal = ({ to }: Import) => /^(shared|server|sdk|console|tests)\//.test(to)
const shown = (list: readonly Import[]) => list.map(({ from, to }) => `${from} → ${to}`)
const outOf = (folder: string, allowed: readonly string[]) =>
  shown(imports.filter(inside(folder)).filter(isLocal).filter(({ to }) => !allowed.some((place) => to.startsWith(`${place}/`))))

test('imports are read at all', () => {
  expect(imports.length).toBeGreaterThan(200)
  expect(shown(imports)).toContain('server/app.ts → server/dependencies.ts')
})

describe('arrows between parts', () => {
  test('shared knows only shared', () => {
    expect(outOf('shared', ['shared'])).toEqual([])
  })

  test('the server knows server and shared', () => {
    expect(outOf('server', ['server', 'shared'])).toEqual([])
  })

  test('the SDK knows sdk and shared', () => {
    expect(outOf('sdk', ['sdk', 'shared'])).toEqual([])
  })

  test('the console knows console, sdk and shared', () => {
    expect(outOf('console', ['console', 'sdk', 'shared'])).toEqual([])
  })
})

describe('shared/dynamics', () => {
  test('imports no package and no Node', () => {
    const foreign = imports.filter(inside('shared/dynamics')).filter((entry) => !isLocal(entry) && !entry.from.endsWith('.mjs'))

    expect(shown(foreign)).toEqual([])
  })

  test('knows nothing of contract or simulation', () => {
    expect(outOf('shared/dynamics', ['shared/dynamics'])).toEqual([])
  })

  test('uses no randomness and no clock of the engine', () => {
    const guilty = files.filter((file) => file.startsWith('shared/') && file.endsWith('.ts')).filter((file) => /Math\.random|Date\.now|new Date\(\)|performance\.now/.test(code(file)))

    expect(guilty).toEqual([])
  })
})

describe('inside the server', () => {
  test('models know only models and the vocabulary of permissions', () => {
    const back = imports.filter(inside('server/models')).filter(isLocal).filter(({ to, isType }) => !to.startsWith('server/models/') && !isType)

    expect(shown(back)).toEqual([])
  })

  test('services know no route and no middleware', () => {
    const back = imports.filter(inside('server/services')).filter(({ to }) => /^server\/(routes|middleware|app)/.test(to) || to === 'express')

    expect(shown(back)).toEqual([])
  })

  test('routes know of models no more than types, and hold no query', () => {
    const across = imports.filter(inside('server/routes')).filter(({ to, isType }) => (to.startsWith('server/models/') && !isType) || to === 'sequelize' || to === 'mariadb')

    expect(shown(across)).toEqual([])
  })

  test('only settings.ts reads the environment', () => {
    const readers = files.filter((file) => file.startsWith('server/') && file.endsWith('.ts')).filter((file) => /process\.env/.test(code(file)))

    expect(readers).toEqual(['server/settings.ts'])
  })

  test('tfjs is loaded by jobs and tests only', () => {
    const elsewhere = imports.filter(({ from, to, isType }) => to.startsWith('@tensorflow/') && !isType && !from.startsWith('server/jobs/'))

    expect(shown(elsewhere)).toEqual([])
  })
})

describe('inside the console', () => {
  const featureOf = (path: string) => /^console\/features\/([^/]+)\//.exec(path)?.[1]

  test('features do not know each other', () => {
    const sideways = imports.filter(({ from, to }) => featureOf(from) !== undefined && featureOf(to) !== undefined && featureOf(from) !== featureOf(to))

    expect(shown(sideways)).toEqual([])
  })

  test('features, components and lib do not know the app; components and lib do not know features', () => {
    const back = imports.filter(
      ({ from, to }) => (/^console\/(features|components|lib)\//.test(from) && to.startsWith('console/app/')) || (/^console\/(components|lib)\//.test(from) && to.startsWith('console/features/')),
    )

    expect(shown(back)).toEqual([])
  })
})

/** A file without its comments. */
function code(file: string): string {
  return readFileSync(join(root, file), 'utf8').replaceAll(/\/\*[\s\S]*?\*\//g, '').replaceAll(/\/\/.*$/gm, '')
}

import { readFile } from 'node:fs/promises'
import { createServer, type IncomingMessage, type ServerResponse } from 'node:http'
import type { AddressInfo } from 'node:net'
import { extname } from 'node:path'
import { inventRows, type InventedTeam } from './invented-team.ts'

const dist = new URL('../../../console/dist/', import.meta.url)
const types: Record<string, string> = {
  '.html': 'text/html',
  '.js': 'text/javascript',
  '.css': 'text/css',
  '.svg': 'image/svg+xml',
  '.woff2': 'font/woff2',
}

export interface InventedApi {
  origin: string
  team: InventedTeam
  /** Answers that stand in for what the routes below would say, by "METHOD /path". */
  overrides: Map<string, (req: IncomingMessage, res: ServerResponse) => void>
  close: () => Promise<void>
}

/**
 * Answers reads of the contract from an invented team, so that pages can be looked at in states that are hard to bring about.
 * Journeys run against the real server.
 */
export async function startInventedApi(team: InventedTeam): Promise<InventedApi> {
  const overrides: InventedApi['overrides'] = new Map()
  const server = createServer((req, res) => {
    const { pathname, searchParams } = new URL(req.url!, 'http://localhost')
    const override = overrides.get(`${req.method} ${pathname}`)
    if (override) return override(req, res)
    if (!pathname.startsWith('/v1/')) return void serveFile(pathname, res)
    const answer = req.method === 'GET' ? read(team, pathname, searchParams) : undefined
    if (answer === undefined) return problem(res, 404, 'not-found', 'There is no such thing here', `There is no ${pathname}.`)
    const etag = (answer as { etag?: string }).etag
    res.writeHead(200, { 'content-type': 'application/json', ...(etag && { etag }) }).end(JSON.stringify(answer))
  })
  await new Promise<void>((resolve) => server.listen(0, '127.0.0.1', resolve))
  return {
    origin: `http://127.0.0.1:${(server.address() as AddressInfo).port}`,
    team,
    overrides,
    close: () =>
      new Promise((resolve) => {
        server.close(() => resolve())
        server.closeAllConnections()
      }),
  }
}

export function problem(
  res: ServerResponse,
  status: number,
  slug: string,
  title: string,
  detail: string,
  headers: Record<string, string> = {},
): void {
  res
    .writeHead(status, { 'content-type': 'application/problem+json', ...headers })
    .end(JSON.stringify({ type: `tag:heftwise.invalid,2026:${slug}`, title, status, detail, request_id: '0193a5c2-7d1e' }))
}

async function serveFile(pathname: string, res: ServerResponse): Promise<void> {
  const name = extname(pathname) === '' ? 'index.html' : pathname.slice(1)
  try {
    const body = await readFile(new URL(name, dist))
    res.writeHead(200, { 'content-type': types[extname(name)] ?? 'application/octet-stream' }).end(body)
  } catch {
    res.writeHead(404).end()
  }
}

function listed<T>(items: T[] | undefined, search: URLSearchParams): { items: T[]; next_cursor: string | null } {
  const from = Number(search.get('cursor') ?? 0)
  const limit = Number(search.get('limit') ?? 50)
  const all = items ?? []
  return { items: all.slice(from, from + limit), next_cursor: from + limit < all.length ? String(from + limit) : null }
}

function read(team: InventedTeam, pathname: string, search: URLSearchParams): object | undefined {
  const [, , noun, name, part, number, last] = pathname.split('/').map(decodeURIComponent)
  switch (noun) {
    case 'session':
      return team.session
    case 'arms':
      return name === undefined ? listed(team.arms, search) : team.arms.find((arm) => arm.name === name)
    case 'recordings':
      return listed(team.recordings, search)
    case 'losses':
      if (name === undefined) return listed(team.losses, search)
      if (part === 'versions') return listed(team.lossVersions[name], search)
      return team.losses.find((loss) => loss.name === name)
    case 'keys':
      return listed(team.keys, search)
    case 'models':
      if (name === undefined) return listed(team.models, search)
      if (part === 'versions') return listed(team.versions[name], search)
      if (part === 'releases') return listed(team.releases[name], search)
      return team.models.find((model) => model.name === name)
    case 'adaptations': {
      if (name === undefined)
        return listed(
          team.adaptations.filter((adaptation) => (search.get('state') ?? adaptation.state) === adaptation.state),
          search,
        )
      if (part === 'log' && last === 'rows') return inventRows(Number(number))
      if (part === 'log') {
        const entries = team.logs[name]
          ?.toReversed()
          .filter(
            (entry) =>
              (search.get('entry') ?? entry.entry) === entry.entry && (search.get('verdict') ?? entry.verdict) === entry.verdict,
          )
        return listed(entries, search)
      }
      return team.adaptations.find((adaptation) => adaptation.id === name)
    }
    case 'jobs':
      if (name === undefined) return listed(team.jobs, search)
      if (part === 'curve') return team.curves[name] ?? { series: [] }
      return team.jobs.find((job) => job.id === name)
    default:
      return undefined
  }
}

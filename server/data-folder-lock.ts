import { readFileSync, rmSync, writeFileSync } from 'node:fs'
import { join } from 'node:path'
import { StartError } from './start-error.ts'

/**
 * One server process per data folder: two would stop each other's private MariaDB. A file left by a killed process is no
 * obstacle, since it names the process by pid and start time.
 */
export function lockDataFolder(folder: string): () => void {
  const file = join(folder, 'server.pid')
  const held = read(file)
  if (held !== undefined && held.pid !== process.pid && held.startedAt === startOf(held.pid)) {
    throw new StartError(`Heftwise runs on the data folder ${folder} already (process ${held.pid}). Stop that one, or name another folder in HEFTWISE_DATA_DIR.`)
  }
  writeFileSync(file, JSON.stringify({ pid: process.pid, startedAt: startOf(process.pid) }), { mode: 0o600 })
  return () => rmSync(file, { force: true })
}

function read(file: string): { pid: number; startedAt: string } | undefined {
  try {
    return JSON.parse(readFileSync(file, 'utf8')) as { pid: number; startedAt: string }
  } catch {
    return undefined
  }
}

/** Field 22 of proc(5)'s stat: when the process started, in clock ticks since boot. */
function startOf(pid: number): string | undefined {
  try {
    const stat = readFileSync(`/proc/${pid}/stat`, 'utf8')
    return stat.slice(stat.lastIndexOf(')') + 2).split(' ')[19]
  } catch {
    return undefined
  }
}

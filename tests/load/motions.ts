import { readFileSync } from 'node:fs'
import { basename, join } from 'node:path'
import type { Motion } from '../../shared/dynamics/motion.ts'

/** Reads one CSV: time, then position, velocity, acceleration and effort of every joint. */
export function readMotion(file: string): Motion {
  const [header, ...lines] = readFileSync(file, 'utf8').trim().split('\n')
  const joints = (header.split(',').length - 1) / 4
  const rows = lines.length
  const motion = {
    name: basename(file, '.csv'),
    rows,
    time: new Float64Array(rows),
    states: new Float64Array(rows * 3 * joints),
    torque: new Float64Array(rows * joints),
  }
  lines.forEach((line, row) => {
    const values = line.split(',').map(Number)
    motion.time[row] = values[0]
    motion.states.set(values.slice(1, 1 + 3 * joints), row * 3 * joints)
    motion.torque.set(values.slice(1 + 3 * joints), row * joints)
  })
  return motion
}

/** Reads the motions of a folder whose recordings.csv names file and use, by use. */
export function readMotionsByUse(folder: string): Record<string, Motion[]> {
  const [header, ...lines] = readFileSync(join(folder, 'recordings.csv'), 'utf8').trim().split('\n')
  const columns = header.split(',')
  const byUse: Record<string, Motion[]> = {}
  for (const line of lines) {
    const cells = line.split(',')
    const use = cells[columns.indexOf('use')].trim();
    (byUse[use] ??= []).push(readMotion(join(folder, cells[columns.indexOf('file')])))
  }
  return byUse
}

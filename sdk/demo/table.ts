import { CYCLE } from '../../shared/simulation/cell.ts'
import type { TrialResult } from './trial.ts'

const quantities = [
  { title: 'Tracking error', unit: 'mrad', key: 'tracking', scale: 1000 },
  { title: 'Torque error', unit: 'N·m', key: 'torque', scale: 1 },
] as const

/** A column of the table per trial, a row per joint: root mean square errors with a payload, and a line of means without. */
export function formatResults(results: readonly TrialResult[], jointNames: readonly string[]): string {
  const sections = (['loaded', 'unloaded'] as const).flatMap((which) => {
    const { duration } = results[0][which]
    if (duration === 0) return []
    return quantities.map(({ title, unit, key, scale }) => {
      const where = which === 'loaded' ? 'with a payload' : 'without payload'
      const heading = `${title} ${where}, RMS ${unit}, over ${duration.toFixed(0)} s`
      return section(heading, results, which === 'loaded' ? jointNames : [], which, key, scale)
    })
  })
  return [...sections, line(results)].join('\n\n')
}

function section(
  title: string,
  results: readonly TrialResult[],
  jointNames: readonly string[],
  which: 'loaded' | 'unloaded',
  quantity: 'tracking' | 'torque',
  scale: number,
): string {
  const rows = jointNames.map((name, j) => [name, ...results.map((result) => show(scale * result[which][quantity][j]))])
  const overall = results.map((result) => {
    const values = result[which][quantity]
    return show(scale * Math.sqrt(values.reduce((sum, value) => sum + value * value, 0) / values.length))
  })
  return format(title, [['', ...results.map(({ name }) => name)], ...rows, ['all joints', ...overall]])
}

function line(results: readonly TrialResult[]): string {
  const rows = results
    .filter(({ link }) => link !== undefined)
    .map(({ name, link, feedForward }) => {
      const {
        predictions,
        batches: { accepted, rejected, stored },
        skipped,
        failed,
      } = link!
      const { horizon, held, local, fallback, late } = feedForward!
      const share = (100 * horizon) / Math.max(1, horizon + held + local + fallback)
      return [
        name,
        String(predictions),
        `${accepted}/${rejected}/${stored}`,
        `${skipped}/${failed}/${late}`,
        `${share.toFixed(1)} %`,
        `${(fallback * CYCLE).toFixed(1)} s`,
      ]
    })
  return format('On the line', [
    ['', 'predictions', 'batches accepted/rejected/stored', 'skipped/failed/late', 'cycles on predictions', 'in fallback'],
    ...rows,
  ])
}

function format(title: string, cells: readonly (readonly string[])[]): string {
  const widths = cells[0].map((_, column) => Math.max(...cells.map((row) => row[column].length)))
  const text = cells.map((row) => row.map((cell, k) => (k === 0 ? cell.padEnd(widths[k]) : cell.padStart(widths[k]))).join('   '))
  return [title, ...text.map((row) => `  ${row}`)].join('\n')
}

function show(value: number): string {
  return value >= 100 ? value.toFixed(0) : value >= 1 ? value.toFixed(2) : value.toFixed(3)
}

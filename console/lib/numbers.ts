const superscripts = '⁰¹²³⁴⁵⁶⁷⁸⁹'

function raised(exponent: number): string {
  return (exponent < 0 ? '⁻' : '') + [...String(Math.abs(exponent))].map((digit) => superscripts[Number(digit)]).join('')
}

/** A number to so many significant digits; integers above 1000 keep all of theirs. True minus, no exponent letters. */
export function significant(value: number, digits = 3): string {
  if (!Number.isFinite(value)) return Number.isNaN(value) ? 'not a number' : value > 0 ? '∞' : '−∞'
  if (value === 0) return '0'
  const size = Math.abs(value)
  const sign = value < 0 ? '−' : ''
  if (Number(size.toPrecision(digits)) >= 1000) return sign + grouped(Math.round(size))
  if (size < 0.001) {
    const [mantissa, exponent] = size.toExponential(digits - 1).split('e') as [string, string]
    return `${sign}${mantissa}·10${raised(Number(exponent))}`
  }
  return sign + size.toPrecision(digits)
}

/** A round number at an axis, without zeros that say nothing. */
export function tickLabel(value: number): string {
  const size = Math.abs(value)
  if (size !== 0 && (size < 0.001 || size >= 1e6)) return significant(value, 1)
  return grouped(Number(value.toPrecision(6)))
}

/** An integer in groups of three, set apart by thin spaces. */
export function grouped(value: number): string {
  return String(value)
    .replace(/\B(?=(\d{3})+$)/g, '\u2009')
    .replace('-', '−')
}

export function percent(share: number, digits = 0): string {
  return `${(share * 100).toFixed(digits)} %`
}

export function bytes(count: number): { value: string; unit: string } {
  const units = ['B', 'kB', 'MB', 'GB']
  let size = count
  let unit = 0
  while (size >= 1000 && unit < units.length - 1) {
    size /= 1000
    unit++
  }
  return { value: unit === 0 ? String(size) : significant(size), unit: units[unit]! }
}

/** A share of change in words: −38 %, +4 %, unchanged. */
export function change(from: number, to: number): string {
  if (from === 0) return ''
  const share = (to - from) / from
  if (Math.abs(share) < 0.005) return 'unchanged'
  return `${share < 0 ? '−' : '+'}${Math.abs(share * 100).toFixed(0)} %`
}

/** "1 row", "12 rows". */
export function counted(count: number, one: string, many = `${one}s`): string {
  return `${grouped(count)} ${count === 1 ? one : many}`
}

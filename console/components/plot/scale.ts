export interface Scale {
  place: (value: number) => number
  ticks: number[]
  kind: 'linear' | 'log'
}

/** Where values of [from, to] lie on [start, end]. */
export function linearScale(from: number, to: number, start: number, end: number, count = 5): Scale {
  const width = to - from || 1
  return {
    kind: 'linear',
    place: (value) => start + ((value - from) / width) * (end - start),
    ticks: roundTicks(from, to, count),
  }
}

/** The same by powers of ten; values at or below 0 stand at the lower edge. */
export function logScale(from: number, to: number, start: number, end: number): Scale {
  const low = Math.log10(from)
  const width = Math.log10(to) - low || 1
  const first = Math.ceil(low - 1e-9)
  const last = Math.floor(Math.log10(to) + 1e-9)
  const decades = Array.from({ length: Math.max(0, last - first + 1) }, (_, step) => 10 ** (first + step))
  // Within two decades the powers alone are too few to read from.
  const ticks = decades.length > 2 ? decades : decadesBetween(from, to)
  return { kind: 'log', place: (value) => start + ((Math.log10(Math.max(value, from)) - low) / width) * (end - start), ticks }
}

function decadesBetween(from: number, to: number): number[] {
  const ticks: number[] = []
  for (let power = Math.floor(Math.log10(from)); power <= Math.ceil(Math.log10(to)); power++)
    for (const step of [1, 2, 5])
      if (step * 10 ** power >= from * 0.999 && step * 10 ** power <= to * 1.001) ticks.push(step * 10 ** power)
  return ticks
}

/** Logarithmic where the values span more than a decade; the edges leave a little air. */
export function errorScale(values: number[], start: number, end: number): Scale {
  const positive = values.filter((value) => value > 0)
  if (positive.length === 0) return linearScale(0, 1, start, end)
  const low = Math.min(...positive)
  const high = Math.max(...positive)
  return high / low > 12 ? logScale(low / 1.3, high * 1.3, start, end) : linearScale(0, high * 1.08, start, end)
}

/** About `wanted` round numbers within [from, to]. */
export function roundTicks(from: number, to: number, wanted: number): number[] {
  if (to <= from) return [from]
  const rough = (to - from) / wanted
  const power = 10 ** Math.floor(Math.log10(rough))
  const step = [1, 2, 5, 10].map((each) => each * power).find((each) => each >= rough)!
  const ticks: number[] = []
  for (let count = Math.ceil(from / step - 1e-9); count * step <= to + step * 1e-9; count++)
    ticks.push(Number((count * step).toPrecision(12)))
  return ticks
}

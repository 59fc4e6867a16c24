import { describe, expect, it } from 'vitest'
import { createKernels } from '../../../shared/dynamics/kernels/kernels.ts'

// The double-precision functions compared with: Math's, right to about one unit of 2⁻⁵³, which is exact beside f32.
const functions = {
  exp: { exact: Math.exp, from: -103, to: 88.7 },
  tanh: { exact: Math.tanh, from: -12, to: 12 },
  softplus: { exact: (z: number) => Math.max(z, 0) + Math.log1p(Math.exp(-Math.abs(z))), from: -103, to: 200 },
  sigmoid: { exact: (z: number) => 1 / (1 + Math.exp(-z)), from: -87, to: 30 },
}
// Range reduction and the last addition each round once, division once more: at most 3 units in the last place.
const allowedUnits = 3

/** Distance in units in the last place of the f32 nearest to `want`. */
function units(got: number, want: number): number {
  const exponent = Math.max(-126, Math.floor(Math.log2(Math.abs(want))))
  return Math.abs(got - want) / 2 ** (exponent - 23)
}

describe.each(Object.entries(functions))('%s of the kernels', (name, { exact, from, to }) => {
  const kernels = createKernels()
  const apply = (values: number[]) =>
    kernels.elementary(name as keyof typeof functions, Float32Array.from(values), new Float32Array(values.length))

  it(`is within ${allowedUnits} units in the last place over its range, subnormal results included`, () => {
    const x = Float32Array.from({ length: 400_001 }, (_, k) => from + ((to - from) * k) / 400_000)

    const y = kernels.elementary(name as keyof typeof functions, x, new Float32Array(x.length))

    let worst = 0
    for (let k = 0; k < x.length; k++) worst = Math.max(worst, units(y[k], exact(x[k])))
    expect(worst).toBeLessThanOrEqual(allowedUnits)
  })

  it('keeps relative precision towards zero', () => {
    const x = Array.from({ length: 2000 }, (_, k) => (k % 2 === 0 ? 1 : -1) * 2 ** (-k / 14)).map(Math.fround)

    const y = apply(x)

    x.forEach((value, k) => expect(units(y[k], exact(value))).toBeLessThanOrEqual(allowedUnits))
  })

  it('keeps NaN', () => {
    expect([...apply([NaN, 1, NaN, 2])].map(Number.isNaN)).toEqual([true, false, true, false])
  })
})

describe('the ends of the f32 range', () => {
  const kernels = createKernels()
  const ends = Float32Array.from([-Infinity, -3.4e38, -1e5, -104, 104, 1e5, 3.4e38, Infinity, -0, 0])
  const of = (which: keyof typeof functions) => [...kernels.elementary(which, ends, new Float32Array(10))]

  it('exp goes to 0 and Infinity, and is 1 at 0', () => {
    expect(of('exp')).toEqual([0, 0, 0, 0, Infinity, Infinity, Infinity, Infinity, 1, 1])
  })

  it('tanh goes to -1 and 1, and keeps the sign of 0', () => {
    expect(of('tanh')).toEqual([-1, -1, -1, -1, 1, 1, 1, 1, -0, 0])
  })

  it('softplus goes to 0 and to its argument', () => {
    const half = Math.fround(Math.LN2)
    expect(of('softplus')).toEqual([0, 0, 0, 0, 104, 1e5, Math.fround(3.4e38), Infinity, half, half])
  })

  it('sigmoid goes to 0 and 1', () => {
    expect(of('sigmoid')).toEqual([0, 0, 0, 0, 1, 1, 1, 1, 0.5, 0.5])
  })
})

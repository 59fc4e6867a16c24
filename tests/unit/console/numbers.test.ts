import { expect, it } from 'vitest'
import { bytes, change, grouped, significant, tickLabel } from '../../../console/lib/numbers.ts'

it.each([
  { given: 0, want: '0' },
  { given: 12.345, want: '12.3' },
  { given: -0.5, want: '−0.500' },
  { given: 999.6, want: '1\u2009000' },
  { given: 123456.7, want: '123\u2009457' },
  { given: 0.00012345, want: '1.23·10⁻⁴' },
  { given: 87, want: '87.0' },
  { given: Infinity, want: '∞' },
  { given: NaN, want: 'not a number' },
])('shows $given with three significant digits as $want', ({ given, want }) => {
  expect(significant(given)).toBe(want)
})

it.each([
  { from: 2, to: 1, want: '−50 %' },
  { from: 1, to: 1.04, want: '+4 %' },
  { from: 1, to: 1.001, want: 'unchanged' },
  { from: 0, to: 1, want: '' },
])('says that $from to $to is "$want"', ({ from, to, want }) => {
  expect(change(from, to)).toBe(want)
})

it('leaves out zeros that say nothing at an axis', () => {
  expect([0, 0.05, 0.1, 50, 1500].map(tickLabel)).toEqual(['0', '0.05', '0.1', '50', '1\u2009500'])
})

it('groups digits by three and takes the unit of bytes that fits', () => {
  expect(grouped(1234567)).toBe('1\u2009234\u2009567')
  expect(bytes(36_700)).toEqual({ value: '36.7', unit: 'kB' })
  expect(bytes(12)).toEqual({ value: '12', unit: 'B' })
})

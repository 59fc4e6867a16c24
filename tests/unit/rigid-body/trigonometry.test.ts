import { expect, it } from 'vitest'
import { createRandom } from '../../../shared/dynamics/random.ts'
import { sineCosine } from '../../../shared/dynamics/rigid-body/trigonometry.ts'

it("sine and cosine agree with the engine's to the last two bits, over many turns", () => {
  const random = createRandom(1)
  const out = new Float64Array(2)
  for (let k = 0; k < 100_000; k++) {
    const angle = (2 * random.uniform() - 1) * (k % 2 === 0 ? 8 : 1e5)
    sineCosine(Float64Array.of(angle), 0, out)

    // Both sides are within a unit in the last place, 1.1e-16 near one.
    if (Math.abs(out[0] - Math.sin(angle)) > 2.3e-16 || Math.abs(out[1] - Math.cos(angle)) > 2.3e-16) expect.fail(`at ${angle}`)
  }
})

it('sine and cosine are exact at zero and NaN where an angle cannot be reduced', () => {
  const out = new Float64Array(2)
  sineCosine(Float64Array.of(0), 0, out)
  expect([...out]).toEqual([0, 1])
  for (const angle of [NaN, Infinity, 2e6]) {
    sineCosine(Float64Array.of(angle), 0, out)
    expect([...out]).toEqual([NaN, NaN])
  }
})

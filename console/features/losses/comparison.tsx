import { Quantity } from '../../components/quantity.tsx'
import { change } from '../../lib/numbers.ts'
import type { LossVersion } from './losses.ts'

/** How far off the next batch was under each loss, everything tuned on the same recordings by the same budget. */
export function Comparison({ version }: { version: LossVersion }) {
  const most = Math.max(...version.validation.map((entry) => entry.error))
  // The best that plain squared error reached is what a learned loss has to beat.
  const plain =
    version.validation.filter((entry) => entry.name.startsWith('mse')).sort((a, b) => a.error - b.error)[0] ??
    version.validation[0]!
  const head = 'py-1.5 pr-4 text-left text-12 font-normal text-soft last:pr-0'
  return (
    <table aria-label="Next-batch error by loss" className="w-full border-collapse">
      <thead>
        <tr className="border-b border-edge">
          <th scope="col" className={head}>
            Loss and update
          </th>
          <th scope="col" className={`${head} w-1/3 max-sm:hidden`}>
            Next-batch error
          </th>
          <th scope="col" className={`${head} text-right`}>
            Error
          </th>
          <th scope="col" className={`${head} text-right`}>
            Against {shown(plain.name)}
          </th>
          <th scope="col" className={`${head} text-right`}>
            Step size
          </th>
        </tr>
      </thead>
      <tbody>
        {version.validation.map((entry) => (
          <tr key={entry.name} className="border-b border-line">
            <th scope="row" className="py-2 pr-4 text-left">
              {shown(entry.name)}
            </th>
            <td className="py-2 pr-4 max-sm:hidden">
              <div aria-hidden="true" className="relative h-4">
                <span className="absolute inset-x-0 top-1/2 h-px bg-line" />
                <span
                  className="absolute top-1/2 left-0 h-2 -translate-y-1/2 bg-edge"
                  style={{ width: `${(entry.error / most) * 100}%` }}
                />
              </div>
            </td>
            <td className="py-2 pr-4 text-right">
              <Quantity value={entry.error} />
            </td>
            <td className="num py-2 pr-4 text-right">{entry === plain ? '–' : change(plain.error, entry.error)}</td>
            <td className="py-2 text-right">
              <Quantity value={entry.rate} />
            </td>
          </tr>
        ))}
      </tbody>
    </table>
  )
}

function shown(name: string): string {
  return name === 'none' ? 'no adaptation' : name.replaceAll('_', ' ')
}

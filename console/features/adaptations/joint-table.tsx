import { LoadBar } from '../../components/load-bar.tsx'
import { Sparkline } from '../../components/plot/sparkline.tsx'
import { Quantity } from '../../components/quantity.tsx'
import { change } from '../../lib/numbers.ts'
import type { BatchRows, LogEntry } from './adaptations.ts'

interface JointTableProps {
  joints: string[]
  rows: BatchRows | undefined
  /** The instant within the batch. */
  row: number
  batch: LogEntry | undefined
  /** Whether each bar says its scale. */
  scale: boolean
  /** Batches, oldest first, for how errors and weights went. */
  history: LogEntry[]
}

/** One line per joint, in joint order: its load, its error before and after the step, its weight in the loss. */
export function JointTable({ joints, rows, row, batch, scale, history }: JointTableProps) {
  const recent = history.slice(-60)
  const head = 'py-1.5 pr-4 text-12 font-normal text-soft text-left last:pr-0'
  const cell = 'py-2 pr-4 align-middle last:pr-0'
  return (
    <table aria-label="Joints" className="w-full border-collapse md:table-fixed">
      <thead>
        <tr className="border-b border-edge">
          <th scope="col" className={`${head} md:w-36`}>
            Joint
          </th>
          <th scope="col" className={`${head} max-md:w-1/3 max-sm:w-1/2`}>
            Load
          </th>
          <th scope="col" className={`${head} w-28 text-right max-md:hidden`}>
            Predicted
          </th>
          <th scope="col" className={`${head} w-28 text-right max-md:hidden`}>
            Measured
          </th>
          <th scope="col" className={`${head} text-right md:w-40`}>
            RMSE before, after step
          </th>
          <th scope="col" className={`${head} w-28 max-lg:hidden`}>
            Recent
          </th>
          <th scope="col" className={`${head} text-right max-sm:hidden md:w-20`}>
            Weight
          </th>
          <th scope="col" className={`${head} w-24 max-xl:hidden`}>
            Recent
          </th>
        </tr>
      </thead>
      <tbody>
        {joints.map((joint, index) => {
          const unit = rows?.unit[index] ?? 'N·m'
          const predicted = rows?.predicted[row]?.[index]
          const measured = rows?.torque[row]?.[index]
          const error = batch?.error?.per_joint[index]
          return (
            <tr key={joint} className="border-b border-line">
              <th scope="row" className={`${cell} text-left font-semibold break-words`}>
                {joint}
              </th>
              <td className={cell}>
                {rows ? (
                  <LoadBar load={{ joint, unit, limit: rows.torque_limits[index]!, predicted, measured }} scale={scale} />
                ) : (
                  <span className="block h-4 border-b border-line" />
                )}
              </td>
              <td className={`${cell} text-right max-md:hidden`}>
                <Quantity value={predicted} unit={unit} />
              </td>
              <td className={`${cell} text-right max-md:hidden`}>
                <Quantity value={measured} unit={unit} />
              </td>
              <td className={`${cell} text-right`}>
                <Quantity value={error?.before} unit={unit} />
                <span className="block min-h-4 text-12 text-soft">
                  {error?.after != null && (
                    <>
                      <Quantity value={error.after} unit={unit} />{' '}
                      <span className="num whitespace-nowrap max-sm:hidden">({change(error.before, error.after)})</span>
                    </>
                  )}
                </span>
              </td>
              <td className={`${cell} max-lg:hidden`}>
                <Sparkline
                  width={88}
                  values={recent.flatMap((entry) => entry.error?.per_joint[index]?.before ?? [])}
                  label={`Error of ${joint} over the newest ${recent.length} batches`}
                />
              </td>
              <td className={`${cell} text-right max-sm:hidden`}>
                <Quantity value={batch?.weights?.[index]} />
              </td>
              <td className={`${cell} max-xl:hidden`}>
                <Sparkline
                  width={72}
                  values={recent.flatMap((entry) => entry.weights?.[index] ?? [])}
                  label={`Loss weight of ${joint} over the newest ${recent.length} batches`}
                />
              </td>
            </tr>
          )
        })}
      </tbody>
    </table>
  )
}

import { useQuery } from '@tanstack/react-query'
import { useState } from 'react'
import { Button, Toggle } from '../../components/button.tsx'
import { LoadBarKey } from '../../components/load-bar.tsx'
import { LoadStrip } from '../../components/load-strip.tsx'
import { Section } from '../../components/page.tsx'
import { Caution, Failed } from '../../components/states.tsx'
import { counted } from '../../lib/numbers.ts'
import { robotTime } from '../../lib/times.ts'
import { useUrlState } from '../../lib/url-state.ts'
import { rowsOptions, type Adaptation, type LogEntry } from './adaptations.ts'
import { JointTable } from './joint-table.tsx'
import { VerdictStamp } from './verdict-stamp.tsx'

/** The newest batch, or the one chosen: its joints at an instant, and over its time. */
export function BatchView({
  adaptation,
  history,
  selected,
}: {
  adaptation: Adaptation
  history: LogEntry[]
  selected: number | undefined
}) {
  const url = useUrlState()
  const batches = history.filter((entry) => entry.entry === 'batch')
  const position = selected ?? batches.at(-1)!.position
  const batch = batches.find((entry) => entry.position === position)
  const rows = useQuery(rowsOptions(adaptation.id, position))
  const [scale, setScale] = useState(false)
  const [instant, setInstant] = useState<{ position: number; row: number }>()
  const last = (rows.data?.time.length ?? 1) - 1
  const row = instant?.position === rows.data?.position ? Math.min(instant?.row ?? last, last) : last
  const until = batches.slice(0, batch === undefined ? undefined : batches.indexOf(batch) + 1)
  return (
    <>
      <Section
        title={selected === undefined ? 'Joints, newest batch' : `Joints, batch ${batch?.sequence ?? ''}`}
        note={
          batch && (
            <span className="inline-flex flex-wrap items-baseline gap-x-3">
              {batch.verdict && <VerdictStamp verdict={batch.verdict} />}
              {batch.reasons?.map((reason) => reason.detail).join(' ')}
            </span>
          )
        }
        actions={
          <>
            <LoadBarKey />
            <Toggle pressed={scale} onPress={() => setScale(!scale)}>
              scale
            </Toggle>
            {selected !== undefined && <Button onClick={() => url.set({ batch: undefined })}>Follow the newest</Button>}
          </>
        }
      >
        {rows.isError && (
          <Failed what="The rows of this batch could not be read" error={rows.error} retry={() => void rows.refetch()} />
        )}
        <JointTable joints={adaptation.joint_names} rows={rows.data} row={row} batch={batch} scale={scale} history={until} />
      </Section>
      {rows.data && rows.data.time.length > 1 && (
        <Section
          title="Over the batch"
          note={`${counted(rows.data.time.length, 'row')}; the table above shows ${robotTime(rows.data.time[row]!)} s, ${row === last ? 'the newest row' : `row ${row + 1}`}`}
        >
          <LoadStrip
            joints={rows.data.joint_names.map((name, index) => ({
              name,
              unit: rows.data.unit[index]!,
              limit: rows.data.torque_limits[index]!,
            }))}
            time={rows.data.time}
            predicted={rows.data.predicted}
            measured={rows.data.torque}
            row={row}
            onRow={(next) => setInstant({ position: rows.data.position, row: next })}
          />
          <div className="mt-3">
            <Caution>
              A predicted torque is advisory. Keep the controller’s own torque, speed and collision limits active.
            </Caution>
          </div>
        </Section>
      )}
    </>
  )
}

import type { ReactNode } from 'react'
import { Facts, Section } from '../../components/page.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { counted, significant } from '../../lib/numbers.ts'
import { robotTime } from '../../lib/times.ts'
import type { Adaptation, LogEntry } from './adaptations.ts'
import { schemeNames } from './health.ts'
import { eventWords } from './log.ts'

const contextNames = {
  tool: 'Tool',
  payload_class: 'Payload class',
  firmware: 'Firmware',
  friction_setting: 'Friction setting',
} as const

/** What it is an adaptation of and for, and with which settings. */
export function ContextSection({ adaptation, history }: { adaptation: Adaptation; history: LogEntry[] }) {
  const event = history.findLast((entry) => entry.entry === 'event')
  const context = Object.entries(contextNames).flatMap(([name, label]): [string, ReactNode][] => {
    const value = adaptation.context[name as keyof typeof contextNames]
    return value === undefined ? [] : [[label, value]]
  })
  const { update } = adaptation
  const settings = [
    update.kind,
    update.rate !== undefined && `step size ${significant(update.rate)}`,
    update.rows_per_step !== undefined && `${counted(update.rows_per_step, 'row')} a step`,
    adaptation.scheme === 'bias' && update.fade !== undefined && `fades to ${significant(update.fade)} in 1 s`,
  ]
  return (
    <Section title="Context">
      <Facts
        items={[
          ['Robot', adaptation.robot],
          ...context,
          [
            'Last event',
            event ? (
              <>
                {eventWords(event)}, <TimeAgo at={event.at} />
              </>
            ) : (
              'none'
            ),
          ],
          ['Changes', schemeNames[adaptation.scheme]],
          ['Update', settings.filter(Boolean).join(', ')],
          [
            'State as of',
            adaptation.as_of === null ? (
              'no accepted row yet'
            ) : (
              <span>
                <span className="num">{robotTime(adaptation.as_of)}</span> s on the robot’s clock
                {adaptation.valid_until !== null && (
                  <>
                    , valid until <span className="num">{robotTime(adaptation.valid_until)}</span> s
                  </>
                )}
              </span>
            ),
          ],
          [
            'Started',
            <>
              {adaptation.created_by}, <TimeAgo at={adaptation.created_at} />
            </>,
          ],
          ['Id', <code className="text-12 break-all">{adaptation.id}</code>],
        ]}
      />
      <p className="mt-3 text-12 text-soft">
        Another tool, payload class, firmware or friction setting needs an adaptation of its own; gripping and releasing within
        the class are events of this one.
      </p>
    </Section>
  )
}

import { useQuery } from '@tanstack/react-query'
import { Button, TextLink } from '../../components/button.tsx'
import { Filter } from '../../components/field.tsx'
import { Quantity } from '../../components/quantity.tsx'
import { Section } from '../../components/page.tsx'
import { Stamp, type MarkName, type Tone } from '../../components/stamp.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { counted } from '../../lib/numbers.ts'
import { paths } from '../../lib/paths.ts'
import { robotTime } from '../../lib/times.ts'
import { oneOf, useUrlState } from '../../lib/url-state.ts'
import { logOptions, type LogEntry } from './adaptations.ts'
import { commandWords, eventWords } from './log.ts'
import { VerdictStamp } from './verdict-stamp.tsx'

/** Batches, events and commands, newest first; filters and page are in the address. */
export function LogSection({ id, ended }: { id: string; ended: boolean }) {
  const url = useUrlState()
  const entry = oneOf(url.get('entry'), ['batch', 'event', 'command'] as const)
  const verdict = oneOf(url.get('verdict'), ['accepted', 'rejected', 'stored'] as const)
  const cursor = url.get('cursor')
  const log = useQuery(logOptions(id, { entry, verdict, cursor }, !ended))
  const next = log.data?.next_cursor
  return (
    <Section
      title="Log"
      actions={
        <>
          <Filter
            label="Entry"
            value={entry}
            onChange={(value) =>
              url.set({
                entry: value,
                cursor: undefined,
                ...(value !== 'batch' && value !== undefined && { verdict: undefined }),
              })
            }
            options={['batch', 'event', 'command'].map((value) => ({ value, label: value }))}
          />
          <Filter
            label="Verdict"
            value={verdict}
            onChange={(value) => url.set({ verdict: value, cursor: undefined })}
            options={['accepted', 'rejected', 'stored'].map((value) => ({ value, label: value }))}
          />
        </>
      }
    >
      {log.isPending ? (
        <SkeletonRows rows={8} label="Loading the log" />
      ) : log.isError && !log.data ? (
        <Failed what="The log could not be read" error={log.error} retry={() => void log.refetch()} />
      ) : log.data.items.length === 0 ? (
        <Empty title={entry || verdict ? 'Nothing in the log fits these filters' : 'Nothing in the log yet'}>
          {entry || verdict ? 'Set them back to any.' : 'The first batch of the controller starts it.'}
        </Empty>
      ) : (
        <ol
          aria-label="Log entries"
          aria-busy={log.isPlaceholderData}
          className={`border-t border-edge ${log.isPlaceholderData ? 'opacity-60' : ''}`}
        >
          {log.data.items.map((item) => (
            <li
              key={item.position}
              className="grid grid-cols-[4.5rem_8rem_1fr_auto] items-baseline gap-x-4 border-b border-line py-2 max-sm:grid-cols-[3rem_1fr_auto]"
            >
              <span className="num text-soft" title={`position ${item.position} in the log`}>
                {item.sequence ?? '·'}
              </span>
              <span>{kindOf(item)}</span>
              <span className="min-w-0 max-sm:col-span-3 max-sm:col-start-1 max-sm:row-start-2">{detailOf(id, item)}</span>
              <TimeAgo at={item.at} className="text-12 text-soft" />
            </li>
          ))}
        </ol>
      )}
      {(cursor !== undefined || next) && (
        <div className="mt-3 flex gap-2">
          {cursor !== undefined && (
            <Button icon="left" onClick={() => url.set({ cursor: undefined }, { push: true })}>
              Newest
            </Button>
          )}
          {next && (
            <Button icon="right" onClick={() => url.set({ cursor: next }, { push: true })}>
              Older
            </Button>
          )}
        </div>
      )}
    </Section>
  )
}

function kindOf(item: LogEntry) {
  if (item.verdict) return <VerdictStamp verdict={item.verdict} />
  if (item.entry === 'event')
    return (
      <Stamp tone="ink" mark="half">
        {eventWords(item)}
      </Stamp>
    )
  const [tone, mark] = commandLook(item)
  return (
    <Stamp tone={tone} mark={mark}>
      {commandWords(item)}
    </Stamp>
  )
}

function commandLook(item: LogEntry): [Tone, MarkName] {
  switch (item.command) {
    case 'resume':
      return ['live', 'wave']
    case 'reset':
      return ['ink', 'ring']
    case 'end':
      return ['soft', 'bar']
    default:
      return ['stop', 'pause']
  }
}

function detailOf(id: string, item: LogEntry) {
  if (item.entry === 'batch') {
    return (
      <span className="flex flex-wrap items-baseline gap-x-4 gap-y-0.5">
        <span>
          error <Quantity value={item.error?.before} />
          {item.error?.after != null && (
            <>
              {' → '}
              <Quantity value={item.error.after} />
            </>
          )}
        </span>
        <TextLink to={paths.adaptation(id, { batch: item.position })} className="py-1 text-12">
          rows<span className="sr-only"> of batch {item.sequence}</span>
        </TextLink>
        <span className="text-12 text-soft">
          {item.rows !== undefined && counted(item.rows, 'row')}
          {item.skipped ? `, ${item.skipped} skipped before it` : ''}
          {item.time != null && `, to ${robotTime(item.time)} s`}, revision {item.revision}
        </span>
        {item.reasons?.map((reason) => (
          <span key={reason.code + (reason.joint ?? '')} className="basis-full text-12 text-soft">
            {reason.detail}
          </span>
        ))}
      </span>
    )
  }
  if (item.entry === 'event')
    return <span className="text-12 text-soft">{item.time != null && `at ${robotTime(item.time)} s, robot’s clock`}</span>
  return (
    <span>
      {item.reason} <span className="text-12 text-soft">by {item.by === 'guard' ? 'its guards' : item.by}</span>
    </span>
  )
}

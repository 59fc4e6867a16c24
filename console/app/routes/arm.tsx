import { useQuery } from '@tanstack/react-query'
import { useParams } from 'react-router-dom'
import { CopyButton } from '../../components/copy-button.tsx'
import { TextLink } from '../../components/button.tsx'
import { Facts, Page, Section } from '../../components/page.tsx'
import { Quantity } from '../../components/quantity.tsx'
import { Stamp } from '../../components/stamp.tsx'
import { Failed, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { armOptions, fallbackNames, type Arm } from '../../features/arms/arms.ts'
import { modelsOptions } from '../../features/models/models.ts'
import { significant } from '../../lib/numbers.ts'
import { paths } from '../../lib/paths.ts'

export function Component() {
  const { arm: name } = useParams()
  const arm = useQuery(armOptions(name!))
  const models = useQuery(modelsOptions)
  if (!arm.data) {
    return (
      <Page title={name!} above={{ to: paths.arms(), label: 'Arms' }}>
        {arm.isError ? (
          <Failed what={`Arm ${name} could not be read`} error={arm.error} retry={() => void arm.refetch()} />
        ) : (
          <SkeletonRows rows={8} label="Loading the arm" />
        )}
      </Page>
    )
  }
  const { data } = arm
  const own = models.data?.items.filter((model) => model.arm === data.name && model.archived_at === null) ?? []
  return (
    <Page
      title={data.name}
      above={{ to: paths.arms(), label: 'Arms' }}
      state={
        data.archived_at === null ? undefined : (
          <Stamp tone="soft" mark="bar">
            archived
          </Stamp>
        )
      }
      facts={data.description || undefined}
    >
      <Section title="Joints" note="in joint order">
        <Joints arm={data} />
      </Section>
      <div className="grid gap-x-12 gap-y-8 lg:grid-cols-2">
        <Section title="What its torque means">
          <Facts
            items={[
              ['Measured at', `the ${data.torque.side} side`],
              ['Positive torque', data.torque.positive_accelerates ? 'accelerates positively' : 'accelerates negatively'],
              [
                'Its controller adds',
                data.torque.controller_adds.length === 0 ? 'nothing by itself' : data.torque.controller_adds.join(', '),
              ],
              ['Fallback', `${fallbackNames[data.fallback]}, when predictions stop`],
              [
                'Horizon',
                <span key="horizon">
                  <Quantity value={data.horizon} unit="s" /> after its newest row an adapted prediction counts no more
                </span>,
              ],
              [
                'Gravity',
                <span key="gravity" className="num">
                  {data.gravity.map((value) => significant(value)).join(', ')} <span className="text-12 text-soft">m/s²</span>
                </span>,
              ],
              ['Firmware', data.firmware ?? 'not stated'],
              [
                'Described',
                <span key="made">
                  {data.created_by}, <TimeAgo at={data.created_at} />
                </span>,
              ],
            ]}
          />
        </Section>
        <Section title="For controller code">
          <p className="mb-2">A request says whose columns it sends by the joints’ fingerprint, or by their names.</p>
          <div className="flex flex-wrap items-center gap-3">
            <code className="border border-edge bg-sunken px-3 py-1.5">{data.joints_fingerprint}</code>
            <CopyButton text={data.joints_fingerprint} label="Copy fingerprint" />
          </div>
          {own.length > 0 && (
            <ul className="mt-4 border-t border-line">
              {own.map((model) => (
                <li key={model.id} className="flex items-baseline gap-4 border-b border-line py-2">
                  <TextLink to={paths.model(model.name)}>{model.name}</TextLink>
                  <span className="ml-auto">
                    {model.live_version === null ? (
                      <Stamp tone="soft" mark="ring">
                        nothing live
                      </Stamp>
                    ) : (
                      <Stamp tone="live" mark="dot">
                        version {model.live_version}
                      </Stamp>
                    )}
                  </span>
                </li>
              ))}
            </ul>
          )}
        </Section>
      </div>
    </Page>
  )
}

function Joints({ arm }: { arm: Arm }) {
  const most = Math.max(...arm.joints.map((joint) => joint.torque_limit))
  const head = 'py-1.5 pr-4 text-left text-12 font-normal text-soft last:pr-0'
  const cell = 'py-2 pr-4 last:pr-0'
  return (
    <table aria-label="Joints" className="w-full border-collapse">
      <thead>
        <tr className="border-b border-edge">
          <th scope="col" className={head}>
            Joint
          </th>
          <th scope="col" className={`${head} max-sm:hidden`}>
            Type
          </th>
          <th scope="col" className={`${head} text-right max-md:hidden`}>
            Position
          </th>
          <th scope="col" className={`${head} text-right`}>
            Velocity
          </th>
          <th scope="col" className={`${head} text-right`}>
            Torque
          </th>
          <th scope="col" className={`${head} w-1/4 max-lg:hidden`}>
            Torque limits beside each other
          </th>
          <th scope="col" className={`${head} text-right max-md:hidden`}>
            Torque rate
          </th>
        </tr>
      </thead>
      <tbody>
        {arm.joints.map((joint) => {
          const [angle, torque] = joint.type === 'prismatic' ? ['m', 'N'] : ['rad', 'N·m']
          return (
            <tr key={joint.name} className="border-b border-line">
              <th scope="row" className={`${cell} text-left`}>
                {joint.name}
              </th>
              <td className={`${cell} max-sm:hidden`}>{joint.type}</td>
              <td className={`${cell} text-right max-md:hidden`}>
                {joint.position_lower === undefined || joint.position_upper === undefined ? (
                  <span className="text-soft">no limit</span>
                ) : (
                  <>
                    <Quantity value={joint.position_lower} /> to <Quantity value={joint.position_upper} unit={angle} />
                  </>
                )}
              </td>
              <td className={`${cell} text-right`}>
                <Quantity value={joint.velocity_limit} unit={`${angle}/s`} />
              </td>
              <td className={`${cell} text-right`}>
                <Quantity value={joint.torque_limit} unit={torque} />
              </td>
              <td className={`${cell} max-lg:hidden`}>
                <div aria-hidden="true" className="relative h-4">
                  <span
                    className="absolute top-1/2 h-px bg-edge"
                    style={{
                      left: `${50 - (joint.torque_limit / most) * 50}%`,
                      right: `${50 - (joint.torque_limit / most) * 50}%`,
                    }}
                  />
                  {[-1, 0, 1].map((side) => (
                    <span
                      key={side}
                      className="absolute top-1/2 h-2.5 w-px -translate-x-1/2 -translate-y-1/2 bg-soft"
                      style={{ left: `${50 + side * (joint.torque_limit / most) * 50}%` }}
                    />
                  ))}
                </div>
              </td>
              <td className={`${cell} text-right max-md:hidden`}>
                <Quantity value={joint.torque_rate_limit} unit={`${torque}/s`} missing="no limit" />
              </td>
            </tr>
          )
        })}
      </tbody>
    </table>
  )
}

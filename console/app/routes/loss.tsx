import { useQuery } from '@tanstack/react-query'
import { useParams } from 'react-router-dom'
import { TextLink } from '../../components/button.tsx'
import { Filter } from '../../components/field.tsx'
import { Facts, Page, Section } from '../../components/page.tsx'
import { Empty, Failed, SkeletonRows } from '../../components/states.tsx'
import { TimeAgo } from '../../components/time-ago.tsx'
import { schemeNames } from '../../features/adaptations/health.ts'
import { Comparison } from '../../features/losses/comparison.tsx'
import { kindNames, lossOptions, lossVersionsOptions, type LossVersion } from '../../features/losses/losses.ts'
import { significant } from '../../lib/numbers.ts'
import { paths } from '../../lib/paths.ts'
import { useUrlState } from '../../lib/url-state.ts'

export function Component() {
  const { loss: name } = useParams()
  const loss = useQuery(lossOptions(name!))
  const versions = useQuery(lossVersionsOptions(name!))
  const url = useUrlState()
  if (!loss.data) {
    return (
      <Page title={name!} above={{ to: paths.losses(), label: 'Losses' }}>
        {loss.isError ? (
          <Failed what={`Loss ${name} could not be read`} error={loss.error} retry={() => void loss.refetch()} />
        ) : (
          <SkeletonRows rows={6} label="Loading the loss" />
        )}
      </Page>
    )
  }
  const all = versions.data?.items ?? []
  const shown = all.find((version) => version.version === Number(url.get('version'))) ?? all[0]
  return (
    <Page
      title={loss.data.name}
      above={{ to: paths.losses(), label: 'Losses' }}
      facts={
        <>
          A {kindNames[loss.data.kind]} loss for <TextLink to={paths.model(loss.data.model)}>{loss.data.model}</TextLink>.{' '}
          {loss.data.description}
        </>
      }
    >
      {versions.isPending ? (
        <SkeletonRows rows={4} label="Loading versions" />
      ) : !versions.data ? (
        <Failed what="The versions could not be read" error={versions.error} retry={() => void versions.refetch()} />
      ) : shown === undefined ? (
        <Empty title="No version yet" action={<TextLink to={paths.jobs()}>To the jobs</TextLink>}>
          A meta-training makes one, for the base version it is learned with.
        </Empty>
      ) : (
        <Section
          title={`Version ${shown.version}`}
          actions={
            all.length > 1 && (
              <Filter
                label="Version"
                value={url.get('version')}
                none="newest"
                onChange={(value) => url.set({ version: value })}
                options={all.map((version) => ({ value: String(version.version), label: String(version.version) }))}
              />
            )
          }
        >
          <Details version={shown} model={loss.data.model} />
        </Section>
      )}
    </Page>
  )
}

function Details({ version, model }: { version: LossVersion; model: string }) {
  const { update, origin } = version
  return (
    <div className="grid gap-8 lg:grid-cols-[3fr_2fr]">
      <div>
        {version.validation.length === 0 ? (
          <p className="text-soft">It came without a comparison.</p>
        ) : (
          <>
            <p className="mb-3">
              Error of the next batch on the validation recordings, every loss tuned there by the same budget.
            </p>
            <Comparison version={version} />
          </>
        )}
      </div>
      <Facts
        items={[
          [
            'Learned with',
            <TextLink key="base" to={paths.model(model, { version: version.base_version })}>
              version {version.base_version} of {model}
            </TextLink>,
          ],
          ['Changes', schemeNames[version.scheme]],
          ['Update', `${update.kind}${update.rate === undefined ? '' : `, step size ${significant(update.rate)}`}`],
          [
            'Origin',
            origin.kind === 'imported' || origin.job === undefined ? (
              origin.kind.replaceAll('_', '-')
            ) : (
              <span key="origin">
                meta-trained by <TextLink to={paths.job(origin.job)}>a job</TextLink>
              </span>
            ),
          ],
          [
            'Made',
            <span key="made">
              {version.created_by}, <TimeAgo at={version.created_at} />
            </span>,
          ],
          [
            'Checksum',
            <code key="checksum" className="text-12 break-all">
              {version.checksum}
            </code>,
          ],
        ]}
      />
    </div>
  )
}

import { Empty } from '../../components/states.tsx'
import { Page } from '../../components/page.tsx'
import { TextLink } from '../../components/button.tsx'
import { paths } from '../../lib/paths.ts'

export function Component() {
  return (
    <Page title="No such page">
      <Empty title="There is nothing at this address" action={<TextLink to={paths.overview()}>To the overview</TextLink>}>
        It may have been typed wrongly, or it belongs to another of your teams.
      </Empty>
    </Page>
  )
}

import { useRouteError, isRouteErrorResponse } from 'react-router-dom'
import { Mark } from '../components/icon.tsx'
import { Failed } from '../components/states.tsx'

/** While the first code and the session are on their way. */
export function Boot() {
  return (
    <div role="status" aria-label="Loading Heftwise" className="grid min-h-dvh place-items-center">
      <Mark className="size-8 text-soft" />
    </div>
  )
}

/** The whole console could not be shown: its code did not come, or the session could not be asked for. */
export function BrokenPage() {
  return (
    <main>
      <BrokenContent />
    </main>
  )
}

/** The same for one page, within the shell. */
export function BrokenContent() {
  const thrown = useRouteError()
  const error = isRouteErrorResponse(thrown) ? new Error(`${thrown.status} ${thrown.statusText}`) : thrown
  return (
    <div className="mx-auto max-w-2xl px-4 py-16">
      <h1 className="sr-only">Something went wrong</h1>
      <Failed what="This page could not be shown" error={error} retry={() => window.location.reload()} />
    </div>
  )
}

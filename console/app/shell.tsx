import { useQuery } from '@tanstack/react-query'
import { lazy, Suspense, useState } from 'react'
import { Navigate, NavLink, Outlet, ScrollRestoration, useLocation } from 'react-router-dom'
import { Drawer } from '../components/dialog.tsx'
import { Icon, Mark } from '../components/icon.tsx'
import { sessionOptions } from '../features/session/session.ts'
import { paths } from '../lib/paths.ts'
import { recall, remember } from '../lib/theme.ts'
import { Boot } from './boot.tsx'
import { Sections } from './sections.tsx'
import { ArmInView, TopLine } from './top-line.tsx'

const PasswordDialog = lazy(async () => ({ default: (await import('../features/session/password-dialog.tsx')).PasswordDialog }))

const railKey = 'heftwise.rail'

/** Everything around a signed-in page: rail, top line, and the way back to the sign-in page. */
export function Shell() {
  const session = useQuery(sessionOptions)
  const location = useLocation()
  const [narrowRail, setNarrowRail] = useState(() => recall(railKey) === 'narrow')
  const [drawer, setDrawer] = useState(false)
  const [changing, setChanging] = useState(false)
  if (session.isPending) return <Boot />
  if (!session.data)
    return <Navigate to={paths.signIn(location.pathname === '/' ? undefined : location.pathname + location.search)} replace />
  const fold = () => {
    remember(railKey, narrowRail ? null : 'narrow')
    setNarrowRail(!narrowRail)
  }
  return (
    <div className="flex min-h-dvh">
      <a
        href="#content"
        className="sr-only z-50 bg-ink px-4 py-2 text-paper focus:not-sr-only focus:fixed focus:top-2 focus:left-2"
      >
        Skip to the content
      </a>
      <nav
        aria-label="Sections"
        className={`sticky top-0 flex h-dvh shrink-0 flex-col border-r border-line max-md:hidden ${narrowRail ? 'w-14' : 'w-48'}`}
      >
        <NavLink to={paths.overview()} aria-label="Heftwise, overview" className="flex h-12 items-center gap-2.5 px-4">
          <Mark className="size-6 shrink-0" />
          {!narrowRail && (
            <span className="text-16 font-semibold" style={{ fontStretch: '118%' }}>
              Heftwise
            </span>
          )}
        </NavLink>
        <Sections session={session.data} narrow={narrowRail} />
        <button
          type="button"
          onClick={fold}
          aria-expanded={!narrowRail}
          aria-label={narrowRail ? 'Unfold the sections' : 'Fold the sections'}
          className="mt-auto flex h-10 items-center gap-3 px-5 text-12 text-soft hover:text-ink"
        >
          <Icon name={narrowRail ? 'right' : 'left'} />
          {!narrowRail && 'Fold'}
        </button>
      </nav>
      <div className="flex min-w-0 grow flex-col">
        <TopLine session={session.data} onMenu={() => setDrawer(true)} onPassword={() => setChanging(true)} />
        <main id="content" tabIndex={-1} className="grow outline-none">
          <Suspense fallback={null}>
            <Outlet />
          </Suspense>
        </main>
      </div>
      <Drawer open={drawer} onClose={() => setDrawer(false)} title="Heftwise">
        <div className="border-b border-line px-4 pt-1 pb-4">
          <p className="pb-1 text-12 text-soft">Arm in view</p>
          <ArmInView stacked />
        </div>
        <nav aria-label="Sections">
          <Sections session={session.data} narrow={false} onChoose={() => setDrawer(false)} />
        </nav>
      </Drawer>
      {changing && (
        <Suspense fallback={null}>
          <PasswordDialog email={session.data.person?.email ?? ''} onClose={() => setChanging(false)} />
        </Suspense>
      )}
      <ScrollRestoration />
    </div>
  )
}

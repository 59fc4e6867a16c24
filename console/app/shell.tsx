import { useMutation, useQuery, useQueryClient } from '@tanstack/react-query'
import { lazy, Suspense, useState, type ReactNode } from 'react'
import { Navigate, NavLink, Outlet, ScrollRestoration, useLocation, useNavigate, useParams } from 'react-router-dom'
import { IconButton } from '../components/button.tsx'
import { Drawer } from '../components/dialog.tsx'
import { Icon, Mark, type IconName } from '../components/icon.tsx'
import { Menu, MenuChoice, MenuItem, MenuLabel, MenuLine } from '../components/menu.tsx'
import { Stamp } from '../components/stamp.tsx'
import { Tooltip } from '../components/tooltip.tsx'
import { adaptationOptions } from '../features/adaptations/adaptations.ts'
import { armsOptions } from '../features/arms/arms.ts'
import { modelsOptions } from '../features/models/models.ts'
import { chooseTeamOptions, sessionOptions, signOutOptions, type Session } from '../features/session/session.ts'
import { paths } from '../lib/paths.ts'
import { recall, remember, setTheme, useTheme } from '../lib/theme.ts'
import { span, useNow } from '../lib/times.ts'
import { Boot } from './boot.tsx'

const PasswordDialog = lazy(async () => ({ default: (await import('../features/session/password-dialog.tsx')).PasswordDialog }))

interface Entry {
  to: string
  label: string
  icon: IconName
  /** Without this action the section is not there. */
  action?: string
}

const sections: { group: string; entries: Entry[] }[] = [
  {
    group: 'Watch',
    entries: [
      { to: paths.overview(), label: 'Overview', icon: 'overview' },
      { to: paths.adaptations(), label: 'Adaptations', icon: 'adaptations' },
    ],
  },
  {
    group: 'Build',
    entries: [
      { to: paths.models(), label: 'Models', icon: 'models' },
      { to: paths.losses(), label: 'Losses', icon: 'losses' },
      { to: paths.recordings(), label: 'Recordings', icon: 'recordings' },
      { to: paths.arms(), label: 'Arms', icon: 'arms' },
      { to: paths.jobs(), label: 'Jobs', icon: 'jobs' },
    ],
  },
  { group: 'Keep', entries: [{ to: paths.keys(), label: 'Keys', icon: 'keys', action: 'manage_keys' }] },
]

const railKey = 'heftwise.rail'
const armKey = 'heftwise.arm'

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

function Sections({ session, narrow, onChoose }: { session: Session; narrow: boolean; onChoose?: () => void }) {
  return (
    <div className="flex flex-col gap-4 py-3">
      {sections.map(({ group, entries }) => {
        const allowed = entries.filter((entry) => entry.action === undefined || session.actions.includes(entry.action))
        if (allowed.length === 0) return null
        return (
          <div key={group}>
            <p className={narrow ? 'mx-4 mb-1 border-t border-line' : 'px-4 pb-1 text-12 text-soft'}>
              {narrow ? <span className="sr-only">{group}</span> : group}
            </p>
            <ul>
              {allowed.map((entry) => (
                <li key={entry.to}>
                  <SectionLink entry={entry} narrow={narrow} onChoose={onChoose} />
                </li>
              ))}
            </ul>
          </div>
        )
      })}
    </div>
  )
}

function SectionLink({ entry, narrow, onChoose }: { entry: Entry; narrow: boolean; onChoose: (() => void) | undefined }) {
  const link = (
    <NavLink
      to={entry.to}
      end={entry.to === paths.overview()}
      onClick={onChoose}
      aria-label={narrow ? entry.label : undefined}
      className={({ isActive }) =>
        `flex h-8 items-center gap-3 border-l-3 pl-[calc(1rem-3px)] max-md:h-11 ${isActive ? 'border-ink font-semibold' : 'border-transparent text-soft hover:border-line hover:text-ink'}`
      }
    >
      <Icon name={entry.icon} />
      {!narrow && entry.label}
    </NavLink>
  )
  return narrow ? (
    <Tooltip text={entry.label} side="right">
      {link}
    </Tooltip>
  ) : (
    link
  )
}

function TopLine({ session, onMenu, onPassword }: { session: Session; onMenu: () => void; onPassword: () => void }) {
  return (
    <header className="sticky top-0 z-30 flex h-12 shrink-0 items-center gap-4 border-b border-line bg-paper px-4 md:px-8">
      <IconButton icon="menu" label="Sections" onClick={onMenu} className="-ml-2 md:hidden" />
      <TeamName session={session} />
      <ArmInView />
      <div className="ml-auto flex shrink-0 items-center gap-2">
        {session.simulated && (
          <Tooltip text="The arms, recordings and robots of this team are simulated. Nothing here moves a machine." side="bottom">
            <span tabIndex={0} className="border border-dashed border-load px-2 py-0.5 text-12 font-semibold text-load">
              simulated<span className="max-lg:hidden"> data</span>
            </span>
          </Tooltip>
        )}
        <PersonMenu session={session} onPassword={onPassword} />
      </div>
    </header>
  )
}

function TeamName({ session }: { session: Session }) {
  const choose = useMutation(chooseTeamOptions(useQueryClient()))
  const navigate = useNavigate()
  if (session.teams.length < 2) return <span className="min-w-0 truncate font-semibold">{session.team.name}</span>
  return (
    <Menu
      align="start"
      trigger={
        <button
          type="button"
          aria-label={`Team ${session.team.name}; choose another`}
          className="flex min-w-0 items-center gap-1 font-semibold hover:text-live"
        >
          <span className="truncate">{session.team.name}</span>
          <Icon name="down" className="size-3" />
        </button>
      }
    >
      <MenuChoice
        label="Team"
        value={session.team.id}
        options={session.teams.map((team) => ({
          value: team.id,
          label: (
            <span>
              {team.name} <span className="text-12 text-soft">{team.role}</span>
            </span>
          ),
        }))}
        onChange={(team) => choose.mutate(team, { onSuccess: () => void navigate(paths.overview()) })}
      />
    </Menu>
  )
}

/** The arm that the page is about, else the one chosen last, and which version answers for it. */
function ArmInView({ stacked = false }: { stacked?: boolean }) {
  const params = useParams()
  const now = useNow()
  const arms = useQuery(armsOptions)
  const models = useQuery(modelsOptions)
  const adaptation = useQuery({
    ...adaptationOptions(params.adaptation ?? ''),
    enabled: params.adaptation !== undefined,
    refetchInterval: false,
  })
  const [chosen, setChosen] = useState(() => recall(armKey) ?? undefined)
  const shownModel = params.model ?? adaptation.data?.model
  const all = models.data?.items ?? []
  const names = (arms.data?.items ?? []).filter((arm) => arm.archived_at === null).map((arm) => arm.name)
  const ofPage = all.find((model) => model.name === shownModel)
  const arm = ofPage?.arm ?? names.find((name) => name === chosen) ?? names[0]
  if (arm === undefined) return null
  const ofArm = all.filter((model) => model.arm === arm && model.archived_at === null)
  const model = ofPage ?? ofArm.find((each) => each.live_version !== null) ?? ofArm[0]
  const name = <span className="num">{arm}</span>
  return (
    <div className={stacked ? 'flex flex-col items-start gap-2' : 'flex min-w-0 items-center gap-3 max-md:hidden'}>
      {!stacked && <span aria-hidden="true" className="h-4 w-px bg-edge" />}
      {names.length > 1 && ofPage === undefined ? (
        <Menu
          align="start"
          trigger={
            <button
              type="button"
              aria-label={`Arm in view: ${arm}; choose another`}
              className="flex items-center gap-1 hover:text-live"
            >
              {name}
              <Icon name="down" className="size-3" />
            </button>
          }
        >
          <MenuChoice
            label="Arm in view"
            value={arm}
            options={names.map((each) => ({ value: each, label: <span className="num">{each}</span> }))}
            onChange={(next) => {
              remember(armKey, next)
              setChosen(next)
            }}
          />
        </Menu>
      ) : (
        name
      )}
      {model && (
        <NavLink to={paths.model(model.name)} className="flex min-w-0 flex-wrap items-center gap-x-2 hover:underline">
          {model.live_version === null ? (
            <span className="text-12 text-soft">nothing live</span>
          ) : (
            <>
              <Stamp tone="live" mark="dot">
                <span className="truncate">
                  {model.name} {model.live_version}
                </span>
              </Stamp>
              {model.live_since !== null && (
                <span className={`text-12 whitespace-nowrap text-soft ${stacked ? '' : 'max-lg:hidden'}`}>
                  live for {span(now - Date.parse(model.live_since))}
                </span>
              )}
            </>
          )}
        </NavLink>
      )}
    </div>
  )
}

function PersonMenu({ session, onPassword }: { session: Session; onPassword: () => void }) {
  const signOut = useMutation(signOutOptions(useQueryClient()))
  const theme = useTheme()
  const name = session.person?.name ?? 'Account'
  return (
    <Menu
      trigger={
        <button
          type="button"

          className="flex h-8 items-center gap-1.5 rounded-2 px-1.5 hover:bg-sunken max-md:h-10"
        >
          <span aria-hidden="true" className="num grid size-6 place-items-center border border-edge text-11">
            {initials(name)}
          </span>
          <span className="max-xl:sr-only">{name}</span>
          <Icon name="down" className="size-3" />
        </button>
      }
    >
      <MenuLabel>
        <span className="block text-14 font-semibold text-ink">{name}</span>
        {session.person?.email}
        <span className="block">{session.role}</span>
      </MenuLabel>
      <MenuLine />
      <MenuChoice
        label="Theme"
        value={theme}
        onChange={setTheme}
        options={[
          { value: 'system', label: themed('system', 'As the system') },
          { value: 'light', label: themed('light', 'Light') },
          { value: 'dark', label: themed('dark', 'Dark') },
        ]}
      />
      <MenuLine />
      <MenuItem icon="keys" onSelect={onPassword}>
        Change password…
      </MenuItem>
      <MenuItem icon="signOut" onSelect={() => signOut.mutate()}>
        Sign out
      </MenuItem>
    </Menu>
  )
}

function themed(icon: IconName, label: string): ReactNode {
  return (
    <span className="flex items-center gap-2">
      <Icon name={icon} className="text-soft" />
      {label}
    </span>
  )
}

function initials(name: string): string {
  return name
    .split(/\s+/)
    .map((part) => part[0] ?? '')
    .slice(0, 2)
    .join('')
    .toUpperCase()
}

import { useMutation, useQuery, useQueryClient } from '@tanstack/react-query'
import { useState, type ReactNode } from 'react'
import { NavLink, useNavigate, useParams } from 'react-router-dom'
import { IconButton } from '../components/button.tsx'
import { Icon, type IconName } from '../components/icon.tsx'
import { Menu, MenuChoice, MenuItem, MenuLabel, MenuLine } from '../components/menu.tsx'
import { Stamp } from '../components/stamp.tsx'
import { Tooltip } from '../components/tooltip.tsx'
import { adaptationOptions } from '../features/adaptations/adaptations.ts'
import { armsOptions } from '../features/arms/arms.ts'
import { modelsOptions } from '../features/models/models.ts'
import { chooseTeamOptions, signOutOptions, type Session } from '../features/session/session.ts'
import { paths } from '../lib/paths.ts'
import { recall, remember, setTheme, useTheme } from '../lib/theme.ts'
import { span, useNow } from '../lib/times.ts'

const armKey = 'heftwise.arm'

/** Team, arm in view and what is live on it, whether the data is simulated, and one's own menu. */
export function TopLine({ session, onMenu, onPassword }: { session: Session; onMenu: () => void; onPassword: () => void }) {
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
export function ArmInView({ stacked = false }: { stacked?: boolean }) {
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

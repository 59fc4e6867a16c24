import { mutationOptions, queryOptions, useSuspenseQuery, type QueryClient } from '@tanstack/react-query'
import { isProblem, type BodyOf, type Schemas } from '../../../sdk/index.ts'
import { heftwise, setCsrfToken } from '../../lib/client.ts'
import { sessionKey } from '../../lib/query-client.ts'

export type Session = Schemas['Session']

function entered(session: Session): Session {
  setCsrfToken(session.csrf_token)
  return session
}

/** Who looks at the console; null when nobody is signed in. */
export const sessionOptions = queryOptions({
  queryKey: sessionKey,
  queryFn: async ({ signal }): Promise<Session | null> => {
    try {
      return entered(await heftwise.session.get({ signal }))
    } catch (error) {
      if (isProblem(error, 'unauthenticated')) return null
      throw error
    }
  },
  staleTime: 60_000,
  refetchOnWindowFocus: 'always',
})

const notSession = { predicate: (query: { queryKey: readonly unknown[] }) => query.queryKey[0] !== sessionKey[0] }

export const signInOptions = (client: QueryClient) =>
  mutationOptions({
    mutationFn: async (body: BodyOf<'signIn'>) => entered(await heftwise.session.signIn(body)),
    onSuccess: (session) => {
      client.removeQueries(notSession)
      client.setQueryData(sessionKey, session)
    },
  })

export const signOutOptions = (client: QueryClient) =>
  mutationOptions({
    mutationFn: () => heftwise.session.signOut(),
    onSuccess: () => {
      setCsrfToken(null)
      client.setQueryData(sessionKey, null)
      client.removeQueries(notSession)
    },
  })

/** Nothing of the former team may stay on screen. */
export const chooseTeamOptions = (client: QueryClient) =>
  mutationOptions({
    mutationFn: async (team: string) => entered(await heftwise.session.chooseTeam(team)),
    onSuccess: (session) => {
      client.setQueryData(sessionKey, session)
      void client.resetQueries(notSession)
    },
  })

/** The session gets a new id and token with it. */
export const changePasswordOptions = (client: QueryClient) =>
  mutationOptions({
    mutationFn: (body: BodyOf<'changePassword'>) => heftwise.session.changePassword(body),
    onSuccess: () => client.invalidateQueries({ queryKey: sessionKey }),
  })

/** The session within the shell, which shows nothing without one. */
export function useSession(): Session {
  const { data } = useSuspenseQuery(sessionOptions)
  if (data === null) throw new Error('Used outside the signed-in shell')
  return data
}

/** Undefined when the person may, otherwise why not; `doing` completes "As operator you can’t …". */
export function useBlocked(action: string, doing: string): string | undefined {
  const session = useSession()
  return session.actions.includes(action)
    ? undefined
    : `As ${session.role ?? 'a key'} you can’t ${doing}. An administrator can give you another role.`
}

export function useMay(action: string): boolean {
  return useSession().actions.includes(action)
}

import { MutationCache, QueryCache, QueryClient } from '@tanstack/react-query'
import { isProblem } from '../../sdk/index.ts'

export const sessionKey = ['session'] as const

/** A session that ended on the server ends here too: the shell then leads to the sign-in page and back. */
export function createQueryClient(): QueryClient {
  const noticeEnd = (error: unknown) => {
    if (isProblem(error, 'unauthenticated')) client.setQueryData(sessionKey, null)
    if (isProblem(error, 'csrf-token-missing')) void client.invalidateQueries({ queryKey: sessionKey })
  }
  const client = new QueryClient({
    queryCache: new QueryCache({ onError: noticeEnd }),
    mutationCache: new MutationCache({ onError: noticeEnd }),
    // The SDK repeats what is safe to repeat.
    defaultOptions: { queries: { retry: false, staleTime: 2_000 }, mutations: { retry: false } },
  })
  return client
}

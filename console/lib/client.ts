import { Heftwise } from '../../sdk/index.ts'

let csrfToken: string | null = null

/** The token of the session that was read last; changing requests carry it. */
export function setCsrfToken(token: string | null): void {
  csrfToken = token
}

/** The SDK's client on the console's session cookie. */
export const heftwise = new Heftwise({
  url: '',
  headers: () => (csrfToken === null ? ({} as Record<string, string>) : { 'x-csrf-token': csrfToken }),
  // A page polls anyway; waiting through long Retry-After pauses would only hide that the service refuses.
  retry: { attempts: 1 },
})

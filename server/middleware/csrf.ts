import { csrfSync } from 'csrf-sync'
import type { Request, RequestHandler } from 'express'
import { Refusal } from '../../shared/contract/problems.ts'
import type { Settings } from '../settings.ts'

const missingToken = () =>
  new Refusal('csrf-token-missing', 'Send the csrf_token of GET /v1/session as the header X-CSRF-Token. It changes at every sign-in.')

const { generateToken, isRequestValid } = csrfSync({
  getTokenFromRequest: (req) => {
    const token = req.headers['x-csrf-token']
    return typeof token === 'string' ? token : undefined
  },
})

/** The session's token, made when there is none yet. */
export function csrfToken(req: Request): string {
  return generateToken(req)
}

/** For changing requests that a session cookie speaks for: the token, and no foreign origin. Keys need neither. */
export function csrfProtection(settings: Settings): RequestHandler {
  return (req, _res, next) => {
    refuseForeignOrigin(settings, req)
    next(isRequestValid(req) ? undefined : missingToken())
  }
}

/** Browsers say where a changing request comes from; anything but our own pages is refused. Scripts send no Origin. */
export function refuseForeignOrigin(settings: Settings, req: Request): void {
  const { origin } = req.headers
  const site = req.headers['sec-fetch-site']
  const isForeign = origin === undefined ? site === 'cross-site' || site === 'same-site' : !isOwnOrigin(settings, req, origin)
  if (isForeign) {
    throw new Refusal('csrf-token-missing', `This request comes from ${origin ?? 'another site'}, not from the console at ${settings.origin ?? `http://${req.headers.host ?? 'this address'}`}.`)
  }
}

function isOwnOrigin(settings: Settings, req: Request, origin: string): boolean {
  if (settings.origin !== null) return origin === settings.origin
  return URL.canParse(origin) && new URL(origin).host === req.headers.host
}

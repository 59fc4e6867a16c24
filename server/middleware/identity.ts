import type { Request, RequestHandler } from 'express'
import { Passport } from 'passport'
import { Strategy as BearerStrategy } from 'passport-http-bearer'
import { Refusal } from '../../shared/contract/problems.ts'
import { hashSecret } from '../services/key-directory.ts'
import type { KeyDirectory } from '../services/key-directory.ts'
import type { Caller } from '../services/permissions.ts'
import type { SessionService } from '../services/sessions.ts'
import { sessionCookieName } from './session-cookie.ts'

declare global {
  // eslint-disable-next-line @typescript-eslint/no-namespace
  namespace Express {
    interface Request {
      caller?: Caller
    }
  }
}

/** RFC 6750, section 3: a challenge without an error code, since no credentials were sent. */
const noCredentials = () =>
  new Refusal('unauthenticated', 'Send an API key as "Authorization: Bearer …", or sign in to the console.', { headers: { 'WWW-Authenticate': 'Bearer realm="heftwise"' } })

const unknownKey = () =>
  new Refusal('invalid-token', 'This key is unknown, expired or revoked. Check it for a missing character, or ask an administrator for a new one.', {
    headers: { 'WWW-Authenticate': 'Bearer realm="heftwise", error="invalid_token", error_description="The key is unknown, expired or revoked"' },
  })

const malformed = () =>
  new Refusal('malformed-credentials', 'The key must be sent once, in the header, as "Authorization: Bearer <key>" with nothing after it.', {
    headers: { 'WWW-Authenticate': 'Bearer realm="heftwise", error="invalid_request", error_description="Send the key once, in the Authorization header"' },
  })

/**
 * Who asks: an API key where there is an Authorization header, else the console's session. Leaves `req.caller` or refuses.
 * `console` opens the session of a request that carries the session cookie.
 */
export function identity({ keys, sessions, consoleSession }: { keys: KeyDirectory; sessions: SessionService; consoleSession: RequestHandler }): RequestHandler {
  const passport = new Passport()
  passport.use(new BearerStrategy({ realm: 'heftwise' }, (token: string, done: (error: unknown, entry: unknown) => void) => done(null, keys.find(hashSecret(token)) ?? false)))

  const byKey: RequestHandler = (req, res, next) => {
    // The strategy would go on to look for a key in the query, where logs and histories keep it.
    if (!/^bearer\b/i.test(req.headers.authorization ?? '')) return next(noCredentials())
    const settle = (error: unknown, entry: { caller: Caller } | false | undefined, _info: unknown, status?: number) => {
      if (error) return next(error)
      if (entry) {
        req.caller = entry.caller
        return next()
      }
      if (status === 400) return next(malformed())
      next(isBearer(req) ? unknownKey() : noCredentials())
    }
    ;(passport.authenticate('bearer', { session: false }, settle) as RequestHandler)(req, res, next)
  }

  const bySession: RequestHandler = (req, res, next) => {
    consoleSession(req, res, (error?: unknown) => {
      if (error) return next(error)
      const { personId, teamId } = req.session
      if (personId === undefined) return next(noCredentials())
      sessions.caller(personId, teamId, req.sessionID).then((caller) => {
        if (caller === undefined) return next(noCredentials())
        req.caller = caller
        next()
      }, next)
    })
  }

  return (req, res, next) => {
    if (req.headers.authorization !== undefined) byKey(req, res, next)
    else if (hasSessionCookie(req)) bySession(req, res, next)
    else next(noCredentials())
  }
}

function isBearer(req: Request): boolean {
  return /^bearer /i.test(req.headers.authorization ?? '')
}

function hasSessionCookie(req: Request): boolean {
  return (req.headers.cookie ?? '').includes(`${sessionCookieName}=`)
}

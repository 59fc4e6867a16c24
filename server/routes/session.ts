import { Router } from 'express'
import type { Request, RequestHandler, Response } from 'express'
import { Passport } from 'passport'
import { Strategy as LocalStrategy } from 'passport-local'
import type { Dependencies } from '../dependencies.ts'
import { inputOf } from '../middleware/contract.ts'
import type { Contract } from '../middleware/contract.ts'
import { csrfToken, refuseForeignOrigin } from '../middleware/csrf.ts'
import { callerLimiter, signInLimiters } from '../middleware/limits.ts'
import { sessionCookieName } from '../middleware/session-cookie.ts'
import type { Services } from '../services/index.ts'

export function sessionRoutes({ settings }: Dependencies, { sessions }: Services, contract: Contract, consoleSession: RequestHandler): Router {
  const router = Router()

  const passport = new Passport()
  passport.use(
    new LocalStrategy({ usernameField: 'email', passReqToCallback: true, session: false }, (req, email, password, done) => {
      sessions.signIn({ email, password }, req.requestId).then((signedIn) => done(null, signedIn), done)
    }),
  )
  const bodyForPassport: RequestHandler = (req, _res, next) => {
    req.body = inputOf<'signIn'>(req).body
    next()
  }
  const onlyOwnPages: RequestHandler = (req, _res, next) => {
    refuseForeignOrigin(settings, req)
    next()
  }

  router.get('/v1/session', contract.handle('getSession', async ({ caller }, res, req) => {
    res.json(await sessions.describe(caller, caller.kind === 'person' ? csrfToken(req) : null))
  }))

  router.post(
    '/v1/session',
    onlyOwnPages,
    ...contract.operation('signIn'),
    ...signInLimiters(settings),
    consoleSession,
    bodyForPassport,
    passport.authenticate('local', { session: false, failWithError: true }) as RequestHandler,
    async (req: Request, res: Response) => {
      const { personId, teamId } = req.user as unknown as { personId: string; teamId: string }
      await beginSession(req, { personId, teamId })
      const caller = await sessions.caller(personId, teamId, req.sessionID)
      res.status(201).json(await sessions.describe(caller!, csrfToken(req)))
    },
  )

  router.patch('/v1/session', contract.handle('chooseTeam', async ({ caller, body }, res, req) => {
    await sessions.requireMember(caller, body.team)
    req.session.teamId = body.team
    const inTeam = await sessions.caller(caller.id, body.team, req.sessionID)
    res.json(await sessions.describe(inTeam!, csrfToken(req)))
  }))

  router.delete('/v1/session', contract.handle('signOut', async ({ caller, requestId }, res, req) => {
    await sessions.recordSignOut(caller, requestId)
    await new Promise<void>((done, fail) => req.session.destroy((error: unknown) => (error ? fail(error as Error) : done())))
    res.clearCookie(sessionCookieName, { path: '/' }).status(204).end()
  }))

  router.put('/v1/session/password', ...contract.operation('changePassword'), callerLimiter('password', 10), async (req: Request, res: Response) => {
    const { caller, body, requestId } = inputOf<'changePassword'>(req)
    const { personId, teamId } = req.session
    await sessions.changePassword(caller, body, requestId)
    await beginSession(req, { personId: personId!, teamId: teamId! })
    csrfToken(req)
    res.status(204).end()
  })

  return router
}

/** A fresh session id at every change of what the session is worth, so that an id planted or seen before is worth nothing. */
async function beginSession(req: Request, data: { personId: string; teamId: string }): Promise<void> {
  await new Promise<void>((done, fail) => req.session.regenerate((error: unknown) => (error ? fail(error as Error) : done())))
  Object.assign(req.session, data)
}

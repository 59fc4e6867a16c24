import type { IncomingMessage, ServerResponse } from 'node:http'
import express from 'express'
import helmet from 'helmet'
import { Refusal } from '../shared/contract/problems.ts'
import type { Dependencies } from './dependencies.ts'
import { loadContract } from './middleware/contract-document.ts'
import { createContract } from './middleware/contract.ts'
import { csrfProtection } from './middleware/csrf.ts'
import { idempotency } from './middleware/idempotency.ts'
import { identity } from './middleware/identity.ts'
import { callerLimiter } from './middleware/limits.ts'
import { methodNotAllowed, problemAnswer } from './middleware/problem-answer.ts'
import { requestContext } from './middleware/request-context.ts'
import { consoleSession } from './middleware/session-cookie.ts'
import { adaptationRoutes } from './routes/adaptations.ts'
import { armRoutes } from './routes/arms.ts'
import { consoleRoutes } from './routes/console.ts'
import { docsRoutes } from './routes/docs.ts'
import { hotRoutes } from './routes/hot/index.ts'
import { jobRoutes } from './routes/jobs.ts'
import { keyRoutes } from './routes/keys.ts'
import { lossRoutes } from './routes/losses.ts'
import { modelRoutes } from './routes/models.ts'
import { recordingRoutes } from './routes/recordings.ts'
import { releaseRoutes } from './routes/releases.ts'
import { sessionRoutes } from './routes/session.ts'
import { systemRoutes } from './routes/system.ts'
import { createServices } from './services/index.ts'
import type { Services } from './services/index.ts'

/** The whole HTTP side. It never listens and holds nothing global: tests make as many as they like. */
export function createApp(d: Dependencies, services: Services = createServices(d)): express.Express {
  const { settings, log } = d
  const document = loadContract()
  const session = consoleSession(d)
  const authenticate = identity({ keys: d.keys, sessions: services.sessions, consoleSession: session })
  const protectFromForgery = csrfProtection(settings)
  const contract = createContract({
    document,
    authenticate,
    protectFromForgery,
    limitCaller: callerLimiter('requests', settings.limits.requestsPerMinute),
    repeatSafely: idempotency(d),
  })

  const app = express()
  app.disable('x-powered-by')
  app.set('etag', false)
  app.set('trust proxy', settings.trustedProxies)
  const context = requestContext()
  app.use(context)

  // Before everything that costs time on every request.
  const hot = hotRoutes(d, services, { authenticate, protectFromForgery })
  app.use(hot.router)

  app.use(securityHeaders(settings.origin?.startsWith('https://') ?? false))
  app.use(systemRoutes(d, contract))
  app.use(sessionRoutes(d, services, contract, session))
  app.use(keyRoutes(services, contract))
  app.use(armRoutes(services, contract))
  app.use(recordingRoutes(services, contract))
  app.use(modelRoutes(services, contract))
  app.use(releaseRoutes(services, contract))
  app.use(lossRoutes(services, contract))
  app.use(jobRoutes(services, contract))
  app.use(adaptationRoutes(services, contract))

  app.use('/v1', (req) => {
    const path = req.baseUrl + req.path
    const allowed = document.operationsAt(path).map(({ method }) => method.toUpperCase())
    if (allowed.length > 0) throw methodNotAllowed(req.method, path, allowed)
    throw new Refusal('not-found', `There is no ${path}. The routes are listed at /docs.`)
  })
  app.use(docsRoutes(document.document))
  app.use(consoleRoutes())
  app.use((req) => {
    throw new Refusal('not-found', `There is nothing at ${req.path}.`)
  })
  const answerProblems = problemAnswer(log)
  app.use(answerProblems)
  // Usual hot requests never enter Express; everything else does.
  const entry = app as unknown as { handle: (req: IncomingMessage, res: ServerResponse, next?: (error?: unknown) => void) => void }
  const handle = entry.handle.bind(app)
  entry.handle = (req, res, next) => {
    if (!hot.direct(req, res, context, answerProblems)) handle(req, res, next)
  }
  return app
}

/** Only what this server itself serves may run or be fetched in its pages. */
function securityHeaders(isHttps: boolean): express.RequestHandler {
  return helmet({
    contentSecurityPolicy: {
      useDefaults: false,
      directives: {
        defaultSrc: ["'none'"],
        scriptSrc: ["'self'"],
        workerSrc: ["'self'", 'blob:'],
        // Styles set by script, as React does, need no exception; Swagger UI and editors write style elements.
        styleSrc: ["'self'", "'unsafe-inline'"],
        imgSrc: ["'self'", 'data:'],
        fontSrc: ["'self'", 'data:'],
        connectSrc: ["'self'"],
        formAction: ["'self'"],
        baseUri: ["'none'"],
        frameAncestors: ["'none'"],
        ...(isHttps ? { upgradeInsecureRequests: [] } : {}),
      },
    },
    strictTransportSecurity: isHttps ? { maxAge: 31_536_000 } : false,
    referrerPolicy: { policy: 'no-referrer' },
    xFrameOptions: { action: 'deny' },
  })
}

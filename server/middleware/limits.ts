import { createHash } from 'node:crypto'
import type { Request, RequestHandler } from 'express'
import { ipKeyGenerator, rateLimit } from 'express-rate-limit'
import { Refusal } from '../../shared/contract/problems.ts'
import { normalEmail } from '../services/people.ts'
import type { Settings } from '../settings.ts'

/**
 * At most so many requests in a window, per whatever `keyOf` says. Answers carry RateLimit and RateLimit-Policy
 * (IETF httpapi draft); the one above the limit is refused with Retry-After.
 */
export function limiter({ name, limit, windowMs, keyOf, detail, onlyFailures = false }: {
  name: string
  limit: number
  windowMs: number
  keyOf: (req: Request) => string
  detail: string
  onlyFailures?: boolean
}): RequestHandler {
  return rateLimit({
    identifier: name,
    limit,
    windowMs,
    standardHeaders: 'draft-8',
    legacyHeaders: false,
    skipSuccessfulRequests: onlyFailures,
    keyGenerator: keyOf,
    // Proxies are told by HEFTWISE_TRUSTED_PROXIES; a stray X-Forwarded-For is no reason to warn on every start.
    validate: { xForwardedForHeader: false, forwardedHeader: false },
    handler: (_req, res, next) => {
      const seconds = Number(res.getHeader('Retry-After') ?? Math.ceil(windowMs / 1_000))
      next(new Refusal('rate-limited', `${detail} Try again in ${seconds} s.`, { headers: { 'Retry-After': String(seconds) } }))
    },
  })
}

/** Per key or person, where the caller is known. */
export function callerLimiter(name: string, limit: number): RequestHandler {
  return limiter({
    name,
    limit,
    windowMs: 60_000,
    keyOf: (req) => (req.caller ? `${req.caller.kind} ${req.caller.id}` : addressOf(req)),
    detail: `More than ${limit} requests in a minute.`,
  })
}

/** Guessing of passwords is slowed per address and per e-mail address; what is right does not count. */
export function signInLimiters({ limits }: Settings): RequestHandler[] {
  const common = { windowMs: limits.signInWindowMs, onlyFailures: true, detail: 'Too many failed sign-ins.' }
  return [
    limiter({ ...common, name: 'sign-in-address', limit: limits.signInsPerAddress, keyOf: addressOf }),
    limiter({ ...common, name: 'sign-in-email', limit: limits.signInsPerEmail, keyOf: (req) => hashEmail(req.input?.body) }),
  ]
}

function addressOf(req: Request): string {
  return ipKeyGenerator(req.ip ?? 'unknown')
}

function hashEmail(body: unknown): string {
  const { email } = body as { email: string }
  return createHash('sha256').update(normalEmail(email)).digest('base64url')
}

import { createHash, randomBytes } from 'node:crypto'
import type { RequestHandler } from 'express'
import session from 'express-session'
import type { SessionData } from 'express-session'
import { Op } from 'sequelize'
import type { Clock } from '../clock.ts'
import type { Database } from '../database/connection.ts'
import type { Settings } from '../settings.ts'

declare module 'express-session' {
  interface SessionData {
    personId: string
    teamId: string
    /** It came from the database, as opposed to one that this request begins. */
    isStored?: true
  }
}

export const sessionCookieName = 'heftwise_session'

/** The session id as it is stored: who reads the table cannot take over the sessions in it. */
export function hashSessionId(id: string): string {
  return createHash('sha256').update(id).digest('hex')
}

/** The console's session: an unguessable id in a cookie that scripts cannot read and other sites cannot send. */
export function consoleSession({ settings, database, clock }: { settings: Settings; database: Database; clock: Clock }): RequestHandler {
  const secure = settings.origin?.startsWith('https://') ?? false
  const handler = session({
    name: sessionCookieName,
    secret: settings.secret,
    genid: () => randomBytes(32).toString('base64url'),
    store: new DatabaseSessionStore(database, clock, settings.session),
    resave: false,
    saveUninitialized: false,
    // Browsers reach an https origin through a proxy that speaks http to us; below, we vouch for it.
    proxy: secure ? true : undefined,
    cookie: { httpOnly: true, sameSite: 'strict', secure, path: '/', maxAge: settings.session.absoluteMs },
  })
  return (req, res, next) => {
    if (secure) req.headers['x-forwarded-proto'] = 'https'
    handler(req, res, next)
  }
}

/** How often a session in use is written as such; the idle limit is much longer. */
const touchMs = 60_000

class DatabaseSessionStore extends session.Store {
  readonly #database: Database
  readonly #clock: Clock
  readonly #limits: Settings['session']
  readonly #touched = new Map<string, number>()

  constructor(database: Database, clock: Clock, limits: Settings['session']) {
    super()
    this.#database = database
    this.#clock = clock
    this.#limits = limits
  }

  override get(id: string, callback: (error: unknown, data?: SessionData | null) => void): void {
    this.#read(hashSessionId(id)).then((data) => callback(null, data), callback)
  }

  override set(id: string, data: SessionData, callback?: (error?: unknown) => void): void {
    this.#write(hashSessionId(id), data).then(() => callback?.(), callback)
  }

  override destroy(id: string, callback?: (error?: unknown) => void): void {
    this.#database.models.Session.destroy({ where: { idHash: hashSessionId(id) } }).then(() => callback?.(), callback)
  }

  override touch(id: string, _data: SessionData, callback?: () => void): void {
    const idHash = hashSessionId(id)
    const now = this.#clock.now()
    if (now.getTime() - (this.#touched.get(idHash) ?? 0) < touchMs) {
      callback?.()
      return
    }
    if (this.#touched.size > 10_000) this.#touched.clear()
    this.#touched.set(idHash, now.getTime())
    this.#database.models.Session.update({ seenAt: now }, { where: { idHash } }).then(() => callback?.(), () => callback?.())
  }

  async #read(idHash: string): Promise<SessionData | null> {
    const row = await this.#database.models.Session.findByPk(idHash)
    if (row === null) return null
    const now = this.#clock.now().getTime()
    if (now - row.seenAt.getTime() > this.#limits.idleMs || now - row.createdAt.getTime() > this.#limits.absoluteMs) {
      await row.destroy()
      return null
    }
    // The cookie's own expiry is not kept: the limits above decide.
    return { ...(JSON.parse(row.data) as Omit<SessionData, 'cookie'>), isStored: true, cookie: { originalMaxAge: this.#limits.absoluteMs } }
  }

  async #write(idHash: string, { cookie: _cookie, isStored, ...data }: SessionData): Promise<void> {
    const now = this.#clock.now()
    const { Session } = this.#database.models
    const stored = { personId: data.personId ?? null, data: JSON.stringify(data), seenAt: now }
    // A session that was ended while this request ran has no row any more, and stays ended.
    const [updated] = await Session.update(stored, { where: { idHash } })
    if (updated > 0 || isStored) return
    await Session.create({ idHash, ...stored, createdAt: now })
    // When it fails, the next sign-in sweeps.
    await this.#sweep(now.getTime()).catch(() => undefined)
  }

  /** Sessions whose cookie nobody sends any more are found by nobody else. */
  async #sweep(now: number): Promise<void> {
    const { idleMs, absoluteMs } = this.#limits
    await this.#database.models.Session.destroy({
      where: { [Op.or]: [{ seenAt: { [Op.lt]: new Date(now - idleMs) } }, { createdAt: { [Op.lt]: new Date(now - absoluteMs) } }] },
    })
  }
}

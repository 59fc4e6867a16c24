import type { Request, Response } from 'express'
import type { Page } from '../services/page.ts'

/** Answers one page of a list: the next cursor in the body and as a link (RFC 8288). */
export function answerPage<T>(req: Request, res: Response, page: Page<T>): void {
  if (page.nextCursor !== null) {
    const next = new URL(req.originalUrl, 'http://unused.invalid')
    next.searchParams.set('cursor', page.nextCursor)
    res.setHeader('Link', `<${next.pathname}${next.search}>; rel="next"`)
  }
  res.json({ items: page.items, next_cursor: page.nextCursor })
}

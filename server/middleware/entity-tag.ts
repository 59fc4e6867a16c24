import type { Request, Response } from 'express'

/**
 * Answers 304 when If-None-Match names the entity tag, else the body, made only then.
 *
 * Express's own comparison is not used: it answers in full whenever the request says `Cache-Control: no-cache`, which
 * fetch adds by itself to every request with If-None-Match.
 *
 * Source: RFC 9110, section 13.1.2: weak comparison, a list of tags or `*`.
 *
 * @param tag  opaque, without quotes
 */
export function answerUnlessKnown(req: Request, res: Response, tag: string, body: () => unknown): void {
  res.setHeader('ETag', `"${tag}"`)
  res.setHeader('Cache-Control', 'private, no-cache')
  const known = req.headers['if-none-match']
  if (known !== undefined && (known.trim() === '*' || ((known.match(/"[^"]*"/g) ?? []) as string[]).includes(`"${tag}"`))) {
    res.status(304).end()
    return
  }
  res.json(body())
}

import { existsSync } from 'node:fs'
import { join } from 'node:path'
import { fileURLToPath } from 'node:url'
import compression from 'compression'
import express, { Router } from 'express'

const folder = fileURLToPath(new URL('../../console/dist/', import.meta.url))

/**
 * The built console: files under hashed names are kept by browsers for good; every other path of the console is its index page.
 * Only these files are compressed: answers that hold a token beside what a sender chose would give it away by their length.
 */
export function consoleRoutes(): Router {
  const router = Router()
  router.use(compression())
  router.use('/assets', express.static(join(folder, 'assets'), { immutable: true, maxAge: '365d', index: false, fallthrough: false, redirect: false }))
  router.use(express.static(folder, { index: false, redirect: false, cacheControl: false, setHeaders: (res) => res.setHeader('Cache-Control', 'no-cache') }))
  router.get('/{*path}', (req, res, next) => {
    const index = join(folder, 'index.html')
    if (!req.accepts('html') || !existsSync(index)) return next()
    res.setHeader('Cache-Control', 'no-cache')
    res.sendFile(index, { cacheControl: false })
  })
  return router
}

import { existsSync } from 'node:fs'
import { join } from 'node:path'
import { fileURLToPath } from 'node:url'
import express, { Router } from 'express'

const folder = fileURLToPath(new URL('../../console/dist/', import.meta.url))

/** The built console: files under hashed names are kept by browsers for good; every other path of the console is its index page. */
export function consoleRoutes(): Router {
  const router = Router()
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

import { Router } from 'express'
import type { Dependencies } from '../dependencies.ts'
import type { Contract } from '../middleware/contract.ts'

export function systemRoutes({ changeFeed }: Dependencies, contract: Contract): Router {
  const router = Router()

  router.get('/healthz', contract.handle('health', (_input, res) => {
    res.json({ status: 'ok' })
  }))

  router.get('/readyz', contract.handle('readiness', async (_input, res) => {
    await changeFeed.ensureCurrent()
    res.json({ status: 'ok' })
  }))

  router.get('/openapi.yaml', contract.handle('contract', (_input, res) => {
    res.type('application/yaml').send(contract.document.text)
  }))

  return router
}

import { Router } from 'express'
import type { OpenAPIV3_1 } from 'openapi-types'
import swaggerUi from 'swagger-ui-express'

/** Swagger UI, with its files from this server, never from elsewhere. */
export function docsRoutes(document: object): Router {
  const router = Router()
  const shown = document as OpenAPIV3_1.Document
  const page = {
    customSiteTitle: 'Heftwise API',
    customCss: '.topbar { display: none }',
    swaggerOptions: { validatorUrl: null, persistAuthorization: false },
  }
  router.use('/docs', swaggerUi.serve, swaggerUi.setup(shown, page))
  return router
}

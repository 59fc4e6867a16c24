import type { QueryClient } from '@tanstack/react-query'
import type { ComponentType } from 'react'
import { createBrowserRouter, redirect, type LoaderFunctionArgs, type RouteObject } from 'react-router-dom'
import { adaptationOptions, adaptationsOptions, historyOptions, runningOptions } from '../features/adaptations/adaptations.ts'
import { armOptions, armsOptions } from '../features/arms/arms.ts'
import { lossesOptions, lossOptions, lossVersionsOptions } from '../features/losses/losses.ts'
import { jobOptions, jobsOptions } from '../features/jobs/jobs.ts'
import { keysOptions } from '../features/keys/keys.ts'
import { modelOptions, modelsOptions, releasesOptions, versionsOptions } from '../features/models/models.ts'
import { recordingsOptions } from '../features/recordings/recordings.ts'
import { sessionOptions } from '../features/session/session.ts'
import { paths } from '../lib/paths.ts'
import { Boot, BrokenContent, BrokenPage } from './boot.tsx'
import { Shell } from './shell.tsx'

export function createRouter(client: QueryClient) {
  /** Starts what a page needs while its code is still on the way; the page itself shows loading and failure. */
  const page = (
    load: () => Promise<{ Component: ComponentType }>,
    start: (args: LoaderFunctionArgs) => Promise<unknown>[] = () => [],
  ): RouteObject => ({
    lazy: { Component: async () => (await load()).Component },
    loader: async (args) => {
      const session = await client.query({ ...sessionOptions, staleTime: 'static' })
      if (session === null) {
        const { pathname, search } = new URL(args.request.url)
        return redirect(paths.signIn(pathname === '/' ? undefined : pathname + search))
      }
      for (const query of start(args)) query.catch(() => undefined)
      return null
    },
    shouldRevalidate: ({ currentUrl, nextUrl }) => currentUrl.pathname !== nextUrl.pathname,
  })

  return createBrowserRouter([
    {
      ErrorBoundary: BrokenPage,
      HydrateFallback: Boot,
      children: [
        { path: '/sign-in', lazy: { Component: async () => (await import('./routes/sign-in.tsx')).Component } },
        {
          Component: Shell,
          children: [
            {
              ErrorBoundary: BrokenContent,
              children: [
                {
                  index: true,
                  ...page(
                    () => import('./routes/overview.tsx'),
                    () => [client.query(runningOptions), client.query(modelsOptions), client.query(jobsOptions)],
                  ),
                } as RouteObject,
                {
                  path: 'adaptations',
                  ...page(
                    () => import('./routes/adaptations.tsx'),
                    () => [client.query(adaptationsOptions)],
                  ),
                },
                {
                  path: 'adaptations/:adaptation',
                  ...page(
                    () => import('./routes/adaptation.tsx'),
                    ({ params }) => [
                      client.query(adaptationOptions(params.adaptation!)),
                      client.query(historyOptions(client, params.adaptation!, false)),
                    ],
                  ),
                },
                {
                  path: 'models',
                  ...page(
                    () => import('./routes/models.tsx'),
                    () => [client.query(modelsOptions)],
                  ),
                },
                {
                  path: 'models/:model',
                  ...page(
                    () => import('./routes/model.tsx'),
                    ({ params }) => [
                      client.query(modelOptions(params.model!)),
                      client.query(versionsOptions(params.model!)),
                      client.query(releasesOptions(params.model!)),
                    ],
                  ),
                },
                {
                  path: 'losses',
                  ...page(
                    () => import('./routes/losses.tsx'),
                    () => [client.query(lossesOptions)],
                  ),
                },
                {
                  path: 'losses/:loss',
                  ...page(
                    () => import('./routes/loss.tsx'),
                    ({ params }) => [client.query(lossOptions(params.loss!)), client.query(lossVersionsOptions(params.loss!))],
                  ),
                },
                {
                  path: 'arms',
                  ...page(
                    () => import('./routes/arms.tsx'),
                    () => [client.query(armsOptions)],
                  ),
                },
                {
                  path: 'arms/:arm',
                  ...page(
                    () => import('./routes/arm.tsx'),
                    ({ params }) => [client.query(armOptions(params.arm!))],
                  ),
                },
                {
                  path: 'recordings',
                  ...page(
                    () => import('./routes/recordings.tsx'),
                    () => [client.query(recordingsOptions)],
                  ),
                },
                {
                  path: 'jobs',
                  ...page(
                    () => import('./routes/jobs.tsx'),
                    () => [client.query(jobsOptions)],
                  ),
                },
                {
                  path: 'jobs/:job',
                  ...page(
                    () => import('./routes/job.tsx'),
                    ({ params }) => [client.query(jobOptions(params.job!))],
                  ),
                },
                {
                  path: 'keys',
                  ...page(
                    () => import('./routes/keys.tsx'),
                    () => [client.query(keysOptions)],
                  ),
                },
                { path: '*', ...page(() => import('./routes/not-found.tsx')) },
              ],
            },
          ],
        },
      ],
    },
  ])
}

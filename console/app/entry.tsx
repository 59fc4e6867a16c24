import { QueryClientProvider } from '@tanstack/react-query'
import { StrictMode } from 'react'
import { createRoot } from 'react-dom/client'
import { RouterProvider } from 'react-router-dom'
import { NoticeProvider } from '../components/notices.tsx'
import { TooltipProvider } from '../components/tooltip.tsx'
import { createQueryClient } from '../lib/query-client.ts'
import { createRouter } from './router.tsx'
import './style.css'

const queryClient = createQueryClient()
const router = createRouter(queryClient)

createRoot(document.getElementById('root')!).render(
  <StrictMode>
    <QueryClientProvider client={queryClient}>
      <TooltipProvider delayDuration={300}>
        <NoticeProvider>
          <RouterProvider router={router} />
        </NoticeProvider>
      </TooltipProvider>
    </QueryClientProvider>
  </StrictMode>,
)

import tailwindcss from '@tailwindcss/vite'
import react from '@vitejs/plugin-react'
import { defineConfig } from 'vitest/config'

export default defineConfig({
  root: 'console',
  plugins: [react(), tailwindcss()],
  build: { outDir: 'dist', emptyOutDir: true, target: 'es2022' },
  server: { proxy: { '/v1': 'http://127.0.0.1:8080', '/docs': 'http://127.0.0.1:8080' } },
  test: {
    root: '.',
    include: ['tests/**/*.test.ts', 'tests/**/*.test.tsx'],
    environment: 'node',
    globalSetup: ['tests/support/global-setup.ts'],
    // Two cores: one file at a time per worker keeps the database and the browser from starving each other.
    maxWorkers: 2,
    testTimeout: 30_000,
    hookTimeout: 120_000,
  },
})

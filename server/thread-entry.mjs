// A thread starts without a TypeScript loader: this registers one, then runs the module it was started for.
import { workerData } from 'node:worker_threads'
import { register } from 'tsx/esm/api'

register()
await import(workerData.module)

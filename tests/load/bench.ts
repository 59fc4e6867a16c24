import { fork } from 'node:child_process'
import type { ChildProcess } from 'node:child_process'
import { mkdtempSync, readFileSync, rmSync } from 'node:fs'
import { availableParallelism, loadavg, tmpdir } from 'node:os'
import { join } from 'node:path'
import { startPrivateMariaDb } from '../../server/database/private-mariadb.ts'
import { jointNamesOf, simulatedMotion } from '../support/served-model.ts'
import type { Motion } from '../support/served-model.ts'
import { ShapedArray } from '../../server/routes/hot/cbor-reader.ts'
import { writeCbor } from '../../server/routes/hot/cbor-writer.ts'
import { drive, requestBytes, sendOnce } from './client.ts'
import type { Run } from './client.ts'
import type { ProductLoad, ProductOptions, ProductReady } from './product-process.ts'

// npm run bench [-- --quick] [-- --only=predict|batches|training|soak] [-- --soak]
// Floor, product and its variant in one run, each in a process of its own, rounds interleaved, medians of the rounds' ratios.

const quick = process.argv.includes('--quick')
const only = process.argv.find((argument) => argument.startsWith('--only='))?.slice(7)
const soak = process.argv.includes('--soak') || only === 'soak'
const joints = 7
const rounds = quick ? 3 : 7
const connections = 8

const folder = mkdtempSync(join(tmpdir(), 'heftwise-bench-'))
const children: ChildProcess[] = []
const mariaDb = await startPrivateMariaDb({ folder: join(folder, 'mariadb') })
interface Server {
  readonly pid: number
  readonly port: number
}

type Product = Server & ProductReady & { readonly process: ChildProcess; readonly sequences: number[] }

async function startFloor(): Promise<Server> {
  const child = start('floor-process.ts')
  const { port } = await message<{ port: number }>(child)
  return { pid: child.pid!, port }
}

async function startProduct(groupCommit: ProductOptions['groupCommit'], adaptations: number): Promise<Product> {
  const child = start('product-process.ts')
  child.send({ database: mariaDb.address, groupCommit, adaptations } satisfies ProductOptions)
  const ready = await message<ProductReady>(child)
  return { ...ready, pid: child.pid!, process: child, sequences: ready.adaptations.map(() => 0) }
}

function start(file: string): ChildProcess {
  const child = fork(join(import.meta.dirname, file), {
    execArgv: ['--import', 'tsx'], env: { ...process.env, HEFTWISE_DATA_DIR: join(folder, 'data'), HEFTWISE_DEMO: '0' },
  })
  children.push(child)
  return child
}

function message<T>(child: ChildProcess): Promise<T> {
  return new Promise((resolve, reject) => {
    const onExit = (code: number | null) => reject(new Error(`A process of the benchmark ended with ${code}.`))
    child.once('exit', onExit)
    child.once('message', (value) => {
      child.off('exit', onExit)
      resolve(value as T)
    })
  })
}

function end(child: ChildProcess): Promise<void> {
  if (child.exitCode !== null) return Promise.resolve()
  return new Promise((done) => {
    child.once('exit', () => done())
    if (child.connected) child.disconnect()
  })
}

interface Case {
  readonly name: string
  readonly target: number
  readonly requests: number
  readonly product: Buffer
  readonly floor: Buffer
}

async function benchPredicts(floor: Server, product: Product): Promise<void> {
  const cases: Case[] = []
  for (const [rows, format, target, requests] of [[1, 'json', 4, 6000], [32, 'json', 3, 4000], [256, 'json', 1.8, 1500], [256, 'cbor', 0.9, 1500]] as const) {
    cases.push(await predictCase(product, rows, format, target, quick ? requests / 4 : requests))
  }
  // Warm: both processes have compiled what they run.
  for (const { product: request, floor: bare, requests } of cases) {
    await drive(product.port, { connections, requests: requests / 2, next: () => request })
    await drive(floor.port, { connections, requests: requests / 2, next: () => bare })
  }
  const found = cases.map(() => ({ ratios: [] as number[], cpu: [] as number[], floorCpu: [] as number[], p50: [] as number[] }))
  for (let round = 0; round < rounds; round++) {
    for (const [k, { product: request, floor: bare, requests }] of cases.entries()) {
      const theirs = await measured(floor, { requests, next: () => bare })
      const ours = await measured(product, { requests, next: () => request })
      requireAll(ours.run, 200)
      found[k].ratios.push(ours.cpuUs / theirs.cpuUs)
      found[k].cpu.push(ours.cpuUs)
      found[k].floorCpu.push(theirs.cpuUs)
      found[k].p50.push(ours.run.latencies[ours.run.requests >> 1])
    }
  }
  console.log(`\npredict, model 21-64-64-7 (tanh), ${connections} connections, ${rounds} interleaved rounds`)
  table(['case', 'requests', 'CPU µs', 'floor µs', 'CPU ÷ floor', 'target', 'p50 ms'], cases.map(({ name, target, requests }, k) => [
    name, String(requests * rounds), median(found[k].cpu).toFixed(0), median(found[k].floorCpu).toFixed(0), median(found[k].ratios).toFixed(2), `≤ ${target}`,
    median(found[k].p50).toFixed(2),
  ]))
}

async function predictCase({ port, secret, model, fingerprint }: Product, rows: number, format: 'json' | 'cbor', target: number, requests: number): Promise<Case> {
  const { position, velocity, acceleration } = simulatedMotion({ joints, rows })
  const path = `/v1/models/${model}/predict`
  const headers = { authorization: `Bearer ${secret}` }
  const text = JSON.stringify({ joints: fingerprint, position: rounded(position), velocity: rounded(velocity), acceleration: rounded(acceleration) })
  const json = requestBytes(path, { ...headers, 'content-type': 'application/json' }, text)
  const shaped = (matrix: number[][]) => new ShapedArray([rows, joints], Float32Array.from(matrix.flat()))
  const cbor = requestBytes(path, { ...headers, 'content-type': 'application/cbor' }, writeCbor({
    joints: fingerprint, position: shaped(position), velocity: shaped(velocity), acceleration: shaped(acceleration),
  }))
  const answer = await sendOnce(port, json)
  if (answer.status !== 200) throw new Error(`predict answered ${answer.status}: ${answer.body}`)
  return {
    name: `${rows} row${rows > 1 ? 's' : ''}, ${format === 'json' ? 'JSON' : 'CBOR typed arrays ÷ JSON floor'}`,
    target,
    requests,
    product: format === 'json' ? json : cbor,
    floor: requestBytes('/', { ...headers, 'content-type': 'application/json', 'x-answer-bytes': String(answer.body.length) }, text),
  }
}

/** Nine digits: what a controller that keeps binary32 states sends. */
function rounded(matrix: number[][]): number[][] {
  return matrix.map((row) => row.map((value) => Number(value.toPrecision(9))))
}

/** One connection: client and server then keep one core busy by turns, and the training has the other. */
async function benchTraining(product: Product): Promise<void> {
  const lines: string[][] = []
  for (const rows of [1, 32]) {
    const requests = quick ? 1500 : 4000
    const { product: request } = await predictCase(product, rows, 'json', 1.2, requests)
    const p50 = async (load: ProductLoad): Promise<number> => {
      const isSo = message<ProductLoad>(product.process)
      product.process.send(load)
      await isSo
      const run = await drive(product.port, { connections: 1, requests, next: () => request })
      requireAll(run, 200)
      return run.latencies[run.requests >> 1]
    }
    await p50('rest')
    const pairs: { alone: number; training: number }[] = []
    for (let round = 0; round < rounds; round++) pairs.push({ alone: await p50('rest'), training: await p50('train') })
    await p50('rest')
    lines.push([
      `${rows} row${rows > 1 ? 's' : ''}, JSON`, String(requests * rounds), median(pairs.map(({ alone }) => alone)).toFixed(3),
      median(pairs.map(({ training }) => training)).toFixed(3), median(pairs.map(({ alone, training }) => training / alone)).toFixed(2), '≤ 1.2',
    ])
  }
  console.log(`\npredict while a meta-training runs in a job thread, 1 connection, ${rounds} interleaved rounds`)
  table(['case', 'requests', 'p50 ms alone', 'p50 ms training', 'ratio', 'target'], lines)
}

/** What else the machine does bends times and rates, and ratios less: said beside them. */
function tellLoad(when: string): void {
  console.log(`machine ${when}: ${availableParallelism()} cores, load average ${loadavg().map((load) => load.toFixed(2)).join(' ')} (1, 5, 15 min)`)
}

async function benchBatches(grouped: Product): Promise<void> {
  const single = await startProduct({ largestGroup: 1, lanes: 8 }, 64)
  console.log(`\ndurable batches of 64 rows, ${rounds} interleaved rounds; "one each": the same server with one transaction per batch, up to 8 at once`)
  const lines: string[][] = []
  for (const [adaptations, target] of [[8, 2], [64, 3]] as const) {
    const requests = quick ? 800 : 1600
    for (const product of [grouped, single]) await batches(product, adaptations, requests)
    const ratios: number[] = []
    const rates: number[] = []
    const singleRates: number[] = []
    const cpu: number[] = []
    const singleCpu: number[] = []
    const p50: number[] = []
    for (let round = 0; round < rounds; round++) {
      const theirs = await batches(single, adaptations, requests)
      const ours = await batches(grouped, adaptations, requests)
      rates.push(ours.run.requests / ours.run.seconds)
      singleRates.push(theirs.run.requests / theirs.run.seconds)
      ratios.push(rates.at(-1)! / singleRates.at(-1)!)
      cpu.push(ours.cpuUs + ours.databaseUs)
      singleCpu.push(theirs.cpuUs + theirs.databaseUs)
      p50.push(ours.run.latencies[ours.run.requests >> 1])
    }
    lines.push([
      `${adaptations} adaptations, ${adaptations} connections`, String(requests * rounds), median(rates).toFixed(0), median(singleRates).toFixed(0), median(ratios).toFixed(2), `≥ ${target}`,
      median(cpu).toFixed(0), median(singleCpu).toFixed(0), median(p50).toFixed(2),
    ])
  }
  table(['case', 'requests', 'grouped /s', 'one each /s', 'ratio', 'target', 'CPU µs (server + MariaDB)', 'one each', 'p50 ms'], lines)
}

async function batches(product: Product, adaptations: number, requests: number): Promise<{ run: Run; cpuUs: number; databaseUs: number }> {
  const before = cpuSeconds(mariaDb.pid)
  const found = await measured(product, { connections: adaptations, requests, next: (connection) => batchRequest(product, connection) })
  requireAll(found.run, 200)
  return { ...found, databaseUs: ((cpuSeconds(mariaDb.pid) - before) * 1e6) / requests }
}

/** Bytes from the field after the times on: written once, so that the load generator leaves the cores to the servers. */
const stretches = Array.from({ length: 8 }, (_, seed) => batchBytes(simulatedMotion({ joints, rows: 64, payload: 1, seed: seed + 1 })))

function batchBytes({ position, velocity, acceleration, torque }: Motion): Buffer {
  return Buffer.from(JSON.stringify({ acceleration_kind: 'measured', position: rounded(position), velocity: rounded(velocity), acceleration: rounded(acceleration), torque: rounded(torque) }).slice(1))
}

function batchRequest({ secret, fingerprint, adaptations, sequences }: Product, k: number): Buffer {
  const sequence = ++sequences[k]
  let times = ''
  for (let row = 2 * 64 * sequence; row < 2 * 64 * (sequence + 1); row += 2) times += `${times === '' ? '' : ','}${Math.floor(row / 100)}.${String(row % 100).padStart(2, '0')}`
  const beginning = `{"joints":"${fingerprint}","sequence":${sequence},"time":[${times}],`
  const rest = stretches[(sequence + k) % stretches.length]
  const head = `POST /v1/adaptations/${adaptations[k]}/batches HTTP/1.1\r\nhost: 127.0.0.1\r\nauthorization: Bearer ${secret}\r\ncontent-type: application/json\r\ncontent-length: ${beginning.length + rest.length}\r\n\r\n`
  return Buffer.concat([Buffer.from(head + beginning, 'latin1'), rest])
}

async function benchMemory(product: Product): Promise<void> {
  const { position, velocity, acceleration } = simulatedMotion({ joints, rows: 1 })
  const request = requestBytes(`/v1/models/${product.model}/predict`, { authorization: `Bearer ${product.secret}`, 'content-type': 'application/json' },
    JSON.stringify({ joint_names: jointNamesOf(joints), position, velocity, acceleration }))
  console.log(`\nmemory: ${residentMiB(product.pid)} MiB at the start`)
  for (let part = 1; part <= 10; part++) {
    await drive(product.port, { connections, requests: quick ? 10_000 : 100_000, next: () => request })
    await batches(product, 8, quick ? 1000 : 10_000)
    console.log(`after ${part * (quick ? 10_000 : 100_000)} predicts and ${part * (quick ? 1000 : 10_000)} batches: ${residentMiB(product.pid)} MiB`)
  }
}

/** A run, and the server's CPU time per request. */
async function measured(
  server: Server, { connections: count = connections, requests, next }: { connections?: number; requests: number; next: (connection: number, k: number) => Buffer },
): Promise<{ run: Run; cpuUs: number }> {
  const before = cpuSeconds(server.pid)
  const run = await drive(server.port, { connections: count, requests, next })
  return { run, cpuUs: ((cpuSeconds(server.pid) - before) * 1e6) / requests }
}

/** User and system time of a process and all its threads: fields 14 and 15 of /proc/<pid>/stat, in hundredths of a second. */
function cpuSeconds(pid: number): number {
  const text = readFileSync(`/proc/${pid}/stat`, 'utf8')
  const fields = text.slice(text.lastIndexOf(')') + 2).split(' ')
  return (Number(fields[11]) + Number(fields[12])) / 100
}

function residentMiB(pid: number): number {
  return Math.round(Number(/VmRSS:\s+(\d+)/.exec(readFileSync(`/proc/${pid}/status`, 'utf8'))?.[1]) / 1024)
}

function requireAll(run: Run, status: number): void {
  if (run.statuses.get(status) !== run.requests) throw new Error(`Not every answer was ${status}: ${JSON.stringify([...run.statuses])}`)
}

function median(values: readonly number[]): number {
  const sorted = [...values].sort((a, b) => a - b)
  return sorted.length % 2 === 1 ? sorted[sorted.length >> 1] : (sorted[sorted.length / 2 - 1] + sorted[sorted.length / 2]) / 2
}

function table(head: string[], lines: string[][]): void {
  const widths = head.map((cell, k) => Math.max(cell.length, ...lines.map((line) => line[k].length)))
  for (const line of [head, ...lines]) console.log(line.map((cell, k) => (k === 0 ? cell.padEnd(widths[k]) : cell.padStart(widths[k]))).join('  '))
}

try {
  tellLoad('before')
  const floor = await startFloor()
  const product = await startProduct({ largestGroup: 256, lanes: 1 }, 64)
  if (only === undefined || only === 'predict') await benchPredicts(floor, product)
  if (only === undefined || only === 'batches') await benchBatches(product)
  if (soak) await benchMemory(product)
  console.log(`\nresident memory of the server: ${residentMiB(product.pid)} MiB`)
  if (only === undefined || only === 'training') await benchTraining(product)
  tellLoad('after')
} finally {
  await Promise.all(children.map(end))
  await mariaDb.stop()
  rmSync(folder, { recursive: true, force: true })
}

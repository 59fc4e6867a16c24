import { createArmService } from '../../server/services/arms.ts'
import { createModelService, modelEtag } from '../../server/services/models.ts'
import { createReleaseService } from '../../server/services/releases.ts'
import { findModel } from '../../server/services/model-records.ts'
import type { Dependencies } from '../../server/dependencies.ts'
import type { Caller } from '../../server/services/permissions.ts'
import type { Services } from '../../server/services/index.ts'
import { fitCoverage, pickReferenceStates } from '../../shared/dynamics/index.ts'
import type { Version } from '../../shared/dynamics/index.ts'
import { initialParameters } from '../../shared/dynamics/network.ts'
import { createRandom } from '../../shared/dynamics/random.ts'

/** A stretch of simulated motion, matrices as arrays of rows, SI units. */
export interface Motion {
  time: number[]
  position: number[][]
  velocity: number[][]
  acceleration: number[][]
  torque: number[][]
}

/**
 * Joints that each feel inertia, friction and gravity by themselves, on sums of sines.
 *
 * @param payload  kg at the tip; changes inertia and gravity of every joint
 */
export function simulatedMotion(
  { joints, rows, rate = 50, start = 0, payload = 0, seed = 1 }: { joints: number; rows: number; rate?: number; start?: number; payload?: number; seed?: number },
): Motion {
  const random = createRandom(seed)
  const speeds = Array.from({ length: 2 * joints }, () => 1 + 3 * random.uniform())
  const phases = Array.from({ length: 2 * joints }, () => 6.28 * random.uniform())
  const wave = (joint: number, t: number, derivative: number) =>
    [2 * joint, 2 * joint + 1].reduce((sum, k) => sum + 0.5 * speeds[k] ** derivative * Math.sin(speeds[k] * t + phases[k] + (derivative * Math.PI) / 2), 0)
  const motion: Motion = { time: [], position: [], velocity: [], acceleration: [], torque: [] }
  for (let row = 0; row < rows; row++) {
    const t = start + row / rate
    const [q, qd, qdd] = [0, 1, 2].map((derivative) => Array.from({ length: joints }, (_, j) => wave(j, t, derivative)))
    motion.time.push(t)
    motion.position.push(q)
    motion.velocity.push(qd)
    motion.acceleration.push(qdd)
    motion.torque.push(q.map((_, j) =>
      (1 + 0.25 * payload) * qdd[j] + 0.8 * qd[j] + 0.5 * Math.tanh(8 * qd[j]) + 9 * (1 + 0.5 * payload) * Math.cos(q[j]) + 0.02 * random.normal()))
  }
  return motion
}

export function jointNamesOf(joints: number): string[] {
  return Array.from({ length: joints }, (_, j) => `joint-${j + 1}`)
}

/** A version whose network was never trained: its statistics are the motion's, its parameters random. */
export function untrainedVersion({ joints, hidden = [16, 16], activation = 'tanh', seed = 5 }: {
  joints: number
  hidden?: number[]
  activation?: 'relu' | 'tanh'
  seed?: number
}): Version {
  const { position, velocity, acceleration, torque } = simulatedMotion({ joints, rows: 600 })
  const rows = position.map((_, row) => [...position[row], ...velocity[row], ...acceleration[row]])
  const data = Float64Array.from(rows.flat())
  const channels = 3 * joints
  const column = (values: number[][], k: number) => values.map((row) => row[k])
  const network = { sizes: [channels, ...hidden, joints], activation }
  return {
    description: {
      joints,
      network,
      normalisation: {
        inputMean: Array.from({ length: channels }, (_, k) => mean(column(rows, k))),
        inputStd: Array.from({ length: channels }, (_, k) => Math.max(deviation(column(rows, k)), [0.1, 0.5, 1.5][Math.floor(k / joints)])),
        outputMean: Array.from({ length: joints }, (_, k) => mean(column(torque, k))),
        outputStd: Array.from({ length: joints }, (_, k) => deviation(column(torque, k))),
      },
      coverage: fitCoverage(data, rows.length, channels),
      noise: Array.from({ length: joints }, () => 0.005),
      referenceStates: pickReferenceStates(data, rows.length, channels),
    },
    parameters: Float32Array.from(initialParameters(network, createRandom(seed)), (value) => 0.5 * value),
  }
}

export interface ServedModel {
  readonly model: string
  readonly joints: number
  readonly jointNames: readonly string[]
  readonly fingerprint: string
  readonly artefact: Version
  /** Adds another version. @returns its number */
  addVersion(artefact: Version): Promise<number>
  release(version: number): Promise<void>
}

/** A model with a live version, made without fitting. */
export async function serveModel(
  { dependencies, services }: { dependencies: Dependencies; services: Services }, caller: Caller,
  { joints = 3, name = 'tinker', torqueLimit = 80, torqueRateLimit, horizon = 1, ...version }: {
    joints?: number
    name?: string
    torqueLimit?: number
    torqueRateLimit?: number
    horizon?: number
    hidden?: number[]
    activation?: 'relu' | 'tanh'
    seed?: number
  } = {},
): Promise<ServedModel> {
  const { database } = dependencies
  const administrator: Caller = { ...caller, role: 'administrator' } as Caller
  const jointNames = jointNamesOf(joints)
  const arm = await createArmService(dependencies).create(administrator, {
    name: `${name}-arm`,
    joints: jointNames.map((joint) => ({ name: joint, type: 'revolute', velocityLimit: 5, torqueLimit, ...(torqueRateLimit !== undefined && { torqueRateLimit }) })),
    gravity: [0, 0, -9.81],
    torque: { side: 'link', positiveAccelerates: true, controllerAdds: [] },
    fallback: 'controlled_stop',
    horizon,
  })
  await createModelService(dependencies).create(administrator, { name, arm: arm.name })
  const artefact = untrainedVersion({ joints, ...version })
  const served: ServedModel = {
    model: name,
    joints,
    jointNames,
    fingerprint: arm.jointsFingerprint,
    artefact,
    addVersion: (added) =>
      database.transaction(async (transaction) => {
        const model = await findModel(database, caller.teamId, name, transaction)
        const record = await services.versions.add(transaction, administrator, model, {
          artefact: added, origin: { kind: 'imported' }, metrics: null, recommended: {}, createdBy: 'a test',
        })
        return record.version
      }),
    async release(number) {
      const model = await createModelService(dependencies).get(administrator, name)
      await createReleaseService(dependencies).release(administrator, name, { version: number, reason: 'a test', ifMatch: modelEtag(model) })
    },
  }
  await served.release(await served.addVersion(artefact))
  return served
}

function mean(values: readonly number[]): number {
  return values.reduce((sum, value) => sum + value, 0) / values.length
}

function deviation(values: readonly number[]): number {
  const centre = mean(values)
  return Math.sqrt(mean(values.map((value) => (value - centre) ** 2)))
}

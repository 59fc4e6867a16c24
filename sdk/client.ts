import type { AnswerOf, BodyOf, QueryOf, Schemas } from './wire.ts'
import { readEvents } from './server-sent-events.ts'
import { sleep, Transport, type Answer, type CallOptions, type TransportOptions } from './transport.ts'

/** A page of a list; `next_cursor` is null on the last one. */
export interface Page<T> {
  items: T[]
  next_cursor: string | null
}

/** Between the end of an event stream and the next try. */
const reconnectMs = 500

type Listed<Q> = Q & CallOptions
const part = encodeURIComponent

/**
 * The service, for controller code, scripts and the console.
 *
 * Every call takes one options object with `signal` and `timeoutMs` beside what it needs, answers what the contract
 * says, and throws ProblemError, ConnectionError or TimeoutError. What is safe to repeat is repeated: reads, predictions,
 * batches and events (their sequence makes a repeat harmless), and posts that carry an Idempotency-Key.
 *
 * @example
 * const heftwise = new Heftwise({ url: 'http://127.0.0.1:8080', key: process.env.HEFTWISE_KEY })
 * const { torque } = await heftwise.predict('alder-7-base', { joints, position, velocity, acceleration })
 */
export class Heftwise {
  readonly #transport: Transport

  constructor(options: TransportOptions) {
    this.#transport = new Transport(options)
  }

  // ---- operate

  /** Torques of up to 4096 states, N·m (prismatic: N), by the live version or the one named. */
  predict(model: string, body: BodyOf<'predict'>, options: CallOptions = {}): Promise<AnswerOf<'predict'>> {
    return this.#body({ ...options, method: 'POST', path: `/v1/models/${part(model)}/predict`, body, repeatable: true })
  }

  /** All that evaluating a version locally needs; undefined when `ifNoneMatch` still matches. */
  versionSnapshot(
    model: string,
    version: number,
    options: CallOptions & { ifNoneMatch?: string } = {},
  ): Promise<{ snapshot: Schemas['VersionSnapshot']; etag: string | undefined } | undefined> {
    return this.#snapshot(`/v1/models/${part(model)}/versions/${version}/snapshot`, options)
  }

  readonly adaptations = {
    list: (query: Listed<QueryOf<'listAdaptations'>> = {}) => this.#list<Schemas['Adaptation']>('/v1/adaptations', query),

    get: (id: string, options: CallOptions = {}): Promise<Schemas['Adaptation']> =>
      this.#body({ ...options, method: 'GET', path: `/v1/adaptations/${part(id)}` }),

    create: (body: Schemas['NewAdaptation'], options: CallOptions = {}): Promise<Schemas['Adaptation']> =>
      this.#create('/v1/adaptations', body, options),

    /** Answered when durable. Repeating the same sequence with the same content changes nothing more. */
    postBatch: (id: string, body: Schemas['Batch'], options: CallOptions = {}): Promise<Schemas['BatchResult']> =>
      this.#body({ ...options, method: 'POST', path: `/v1/adaptations/${part(id)}/batches`, body, repeatable: true }),

    postEvent: (id: string, body: Schemas['NewEvent'], options: CallOptions = {}): Promise<Schemas['EventResult']> =>
      this.#body({ ...options, method: 'POST', path: `/v1/adaptations/${part(id)}/events`, body, repeatable: true }),

    predict: (id: string, body: Schemas['AdaptedPredictRequest'], options: CallOptions = {}): Promise<Schemas['AdaptedPrediction']> =>
      this.#body({ ...options, method: 'POST', path: `/v1/adaptations/${part(id)}/predict`, body, repeatable: true }),

    log: (id: string, query: Listed<QueryOf<'listAdaptationLog'>> = {}) =>
      this.#list<Schemas['LogEntry']>(`/v1/adaptations/${part(id)}/log`, query),

    /** The rows of one stored batch and what was predicted for them before it; `position` is its place in the log. */
    rows: (id: string, position: number, options: CallOptions = {}): Promise<Schemas['BatchRows']> =>
      this.#body({ ...options, method: 'GET', path: `/v1/adaptations/${part(id)}/log/${position}/rows` }),

    snapshot: (
      id: string,
      options: CallOptions & { ifNoneMatch?: string } = {},
    ): Promise<{ snapshot: Schemas['AdaptationSnapshot']; etag: string | undefined } | undefined> =>
      this.#snapshot(`/v1/adaptations/${part(id)}/snapshot`, options),

    freeze: (id: string, reason: string, options: CallOptions = {}): Promise<Schemas['Adaptation']> =>
      this.#create(`/v1/adaptations/${part(id)}/freeze`, { reason }, options),

    /** Only people may; a key is refused. */
    resume: (id: string, reason: string, options: CallOptions = {}): Promise<Schemas['Adaptation']> =>
      this.#create(`/v1/adaptations/${part(id)}/resume`, { reason }, options),

    reset: (id: string, reason: string, options: CallOptions = {}): Promise<Schemas['Adaptation']> =>
      this.#create(`/v1/adaptations/${part(id)}/reset`, { reason }, options),

    promote: (id: string, reason: string, options: CallOptions = {}): Promise<Schemas['Version']> =>
      this.#create(`/v1/adaptations/${part(id)}/promote`, { reason }, options),

    end: (id: string, reason: string, options: CallOptions = {}): Promise<Schemas['Adaptation']> =>
      this.#body({ ...options, method: 'DELETE', path: `/v1/adaptations/${part(id)}`, query: { reason } }),
  }

  // ---- build

  readonly arms = {
    list: (query: Listed<QueryOf<'listArms'>> = {}) => this.#list<Schemas['Arm']>('/v1/arms', query),
    get: (name: string, options: CallOptions = {}): Promise<Schemas['Arm']> =>
      this.#body({ ...options, method: 'GET', path: `/v1/arms/${part(name)}` }),
    create: (body: Schemas['NewArm'], options: CallOptions = {}): Promise<Schemas['Arm']> => this.#create('/v1/arms', body, options),
    /** What a URDF says of an arm: joints, limits, bodies and findings. Nothing is stored. */
    inspect: (body: Schemas['DescriptionToInspect'], options: CallOptions = {}): Promise<Schemas['InspectedDescription']> =>
      this.#body({ ...options, method: 'POST', path: '/v1/arms/inspect', body }),
    archive: (name: string, reason: string, options: CallOptions = {}): Promise<Schemas['Arm']> =>
      this.#create(`/v1/arms/${part(name)}/archive`, { reason }, options),
  }

  readonly recordings = {
    list: (query: Listed<QueryOf<'listRecordings'>> = {}) => this.#list<Schemas['Recording']>('/v1/recordings', query),
    get: (id: string, options: CallOptions = {}): Promise<Schemas['Recording']> =>
      this.#body({ ...options, method: 'GET', path: `/v1/recordings/${part(id)}` }),

    /** Uploads a CSV. The same content for the same arm again is not stored twice: `stored` is false. */
    upload: async (
      recording: { arm: string; use: Schemas['RecordingUse']; name?: string; context?: Schemas['RecordingContext']; file: Blob; fileName: string },
      options: CallOptions = {},
    ): Promise<{ recording: Schemas['Recording']; stored: boolean }> => {
      const form = new FormData()
      form.set('arm', recording.arm)
      form.set('use', recording.use)
      if (recording.name !== undefined) form.set('name', recording.name)
      if (recording.context !== undefined) form.set('context', JSON.stringify(recording.context))
      form.set('file', recording.file, recording.fileName)
      const { body, status } = await this.#transport.send<Schemas['Recording']>({
        timeoutMs: 600_000,
        ...options,
        method: 'POST',
        path: '/v1/recordings',
        body: form,
        repeatable: true,
      })
      return { recording: body, stored: status === 201 }
    },

    delete: (id: string, reason: string, options: CallOptions = {}): Promise<void> =>
      this.#body({ ...options, method: 'DELETE', path: `/v1/recordings/${part(id)}`, query: { reason } }),
  }

  readonly models = {
    list: (query: Listed<QueryOf<'listModels'>> = {}) => this.#list<Schemas['Model']>('/v1/models', query),
    create: (body: Schemas['NewModel'], options: CallOptions = {}): Promise<Schemas['Model']> => this.#create('/v1/models', body, options),
    archive: (name: string, reason: string, options: CallOptions = {}): Promise<Schemas['Model']> =>
      this.#create(`/v1/models/${part(name)}/archive`, { reason }, options),

    /** The model, and the ETag that release and rollback want. */
    get: async (name: string, options: CallOptions = {}): Promise<Schemas['Model'] & { etag: string }> => {
      const { body, etag } = await this.#transport.send<Schemas['Model']>({ ...options, method: 'GET', path: `/v1/models/${part(name)}` })
      return { ...body, etag: etag ?? '' }
    },

    versions: (name: string, query: Listed<QueryOf<'listVersions'>> = {}) =>
      this.#list<Schemas['Version']>(`/v1/models/${part(name)}/versions`, query),
    version: (name: string, version: number, options: CallOptions = {}): Promise<Schemas['Version']> =>
      this.#body({ ...options, method: 'GET', path: `/v1/models/${part(name)}/versions/${version}` }),
    importVersion: (name: string, snapshot: Schemas['VersionSnapshot'], options: CallOptions = {}): Promise<Schemas['Version']> =>
      this.#create(`/v1/models/${part(name)}/versions`, snapshot, options),

    releases: (name: string, query: Listed<QueryOf<'listReleases'>> = {}) =>
      this.#list<Schemas['Release']>(`/v1/models/${part(name)}/releases`, query),

    /** @param ifMatch the ETag of `get`: the release is refused when somebody else released in between */
    release: (name: string, body: BodyOf<'releaseVersion'>, ifMatch: string, options: CallOptions = {}): Promise<Schemas['Release']> =>
      this.#create(`/v1/models/${part(name)}/releases`, body, options, { 'if-match': ifMatch }),

    rollBack: (name: string, body: BodyOf<'rollBack'>, ifMatch: string, options: CallOptions = {}): Promise<Schemas['Release']> =>
      this.#create(`/v1/models/${part(name)}/rollback`, body, options, { 'if-match': ifMatch }),
  }

  readonly losses = {
    list: (query: Listed<QueryOf<'listLosses'>> = {}) => this.#list<Schemas['Loss']>('/v1/losses', query),
    get: (name: string, options: CallOptions = {}): Promise<Schemas['Loss']> =>
      this.#body({ ...options, method: 'GET', path: `/v1/losses/${part(name)}` }),
    create: (body: Schemas['NewLoss'], options: CallOptions = {}): Promise<Schemas['Loss']> => this.#create('/v1/losses', body, options),
    versions: (name: string, query: Listed<QueryOf<'listLossVersions'>> = {}) =>
      this.#list<Schemas['LossVersion']>(`/v1/losses/${part(name)}/versions`, query),
    version: (name: string, version: number, options: CallOptions = {}): Promise<Schemas['LossVersion']> =>
      this.#body({ ...options, method: 'GET', path: `/v1/losses/${part(name)}/versions/${version}` }),
    snapshot: (
      name: string,
      version: number,
      options: CallOptions & { ifNoneMatch?: string } = {},
    ): Promise<{ snapshot: Schemas['LossSnapshot']; etag: string | undefined } | undefined> =>
      this.#snapshot(`/v1/losses/${part(name)}/versions/${version}/snapshot`, options),
    importVersion: (name: string, snapshot: Schemas['LossSnapshot'], options: CallOptions = {}): Promise<Schemas['LossVersion']> =>
      this.#create(`/v1/losses/${part(name)}/versions`, snapshot, options),
  }

  readonly jobs = {
    list: (query: Listed<QueryOf<'listJobs'>> = {}) => this.#list<Schemas['Job']>('/v1/jobs', query),
    get: (id: string, options: CallOptions = {}): Promise<Schemas['Job']> =>
      this.#body({ ...options, method: 'GET', path: `/v1/jobs/${part(id)}` }),
    create: (body: BodyOf<'createJob'>, options: CallOptions = {}): Promise<Schemas['Job']> => this.#create('/v1/jobs', body, options),
    curve: (id: string, options: CallOptions = {}): Promise<Schemas['JobCurve']> =>
      this.#body({ ...options, method: 'GET', path: `/v1/jobs/${part(id)}/curve` }),
    cancel: (id: string, reason: string, options: CallOptions = {}): Promise<Schemas['Job']> =>
      this.#create(`/v1/jobs/${part(id)}/cancel`, { reason }, options),

    /** The job each time it changes, until it has ended. A broken stream is taken up again by asking for the job. */
    watch: (id: string, options: CallOptions = {}): AsyncGenerator<Schemas['Job']> => this.#watchJob(id, options),
  }

  // ---- account

  readonly session = {
    get: (options: CallOptions = {}): Promise<Schemas['Session']> => this.#body({ ...options, method: 'GET', path: '/v1/session' }),
    signIn: (body: BodyOf<'signIn'>, options: CallOptions = {}): Promise<Schemas['Session']> =>
      this.#body({ ...options, method: 'POST', path: '/v1/session', body }),
    chooseTeam: (team: string, options: CallOptions = {}): Promise<Schemas['Session']> =>
      this.#body({ ...options, method: 'PATCH', path: '/v1/session', body: { team } }),
    signOut: (options: CallOptions = {}): Promise<void> => this.#body({ ...options, method: 'DELETE', path: '/v1/session' }),
    changePassword: (body: BodyOf<'changePassword'>, options: CallOptions = {}): Promise<void> =>
      this.#body({ ...options, method: 'PUT', path: '/v1/session/password', body }),
  }

  readonly keys = {
    list: (query: Listed<QueryOf<'listKeys'>> = {}) => this.#list<Schemas['Key']>('/v1/keys', query),
    get: (id: string, options: CallOptions = {}): Promise<Schemas['Key']> =>
      this.#body({ ...options, method: 'GET', path: `/v1/keys/${part(id)}` }),
    /** Never repeated by itself: the secret is in this one answer only. */
    create: (body: Schemas['NewKey'], options: CallOptions = {}): Promise<Schemas['KeyWithSecret']> =>
      this.#body({ ...options, method: 'POST', path: '/v1/keys', body }),
    revoke: (id: string, reason: string, options: CallOptions = {}): Promise<Schemas['Key']> =>
      this.#create(`/v1/keys/${part(id)}/revoke`, { reason }, options),
    rotate: (id: string, body: BodyOf<'rotateKey'>, options: CallOptions = {}): Promise<Schemas['KeyWithSecret']> =>
      this.#body({ ...options, method: 'POST', path: `/v1/keys/${part(id)}/rotate`, body }),
    /** The key of this client gets a new secret; make a new client with it before the overlap is over. */
    rotateCurrent: (body: BodyOf<'rotateCurrentKey'>, options: CallOptions = {}): Promise<Schemas['KeyWithSecret']> =>
      this.#body({ ...options, method: 'POST', path: '/v1/keys/current/rotate', body }),
  }

  // ---- how calls are made

  async #body<T>(call: Parameters<Transport['send']>[0]): Promise<T> {
    return (await this.#transport.send<T>(call)).body
  }

  #create<T>(path: string, body: unknown, options: CallOptions, headers: Record<string, string> = {}): Promise<T> {
    const idempotencyKey = crypto.randomUUID()
    return this.#body({ ...options, method: 'POST', path, body, headers: { 'idempotency-key': idempotencyKey, ...headers }, repeatable: true })
  }

  #list<T>(path: string, { signal, timeoutMs, ...query }: CallOptions & object): Promise<Page<T>> {
    return this.#body({ signal, timeoutMs, method: 'GET', path, query })
  }

  async #snapshot<T>(path: string, { ifNoneMatch, ...options }: CallOptions & { ifNoneMatch?: string }) {
    const headers = ifNoneMatch === undefined ? undefined : { 'if-none-match': ifNoneMatch }
    const answer: Answer<T> = await this.#transport.send<T>({ timeoutMs: 60_000, ...options, method: 'GET', path, headers })
    return answer.status === 304 ? undefined : { snapshot: answer.body, etag: answer.etag }
  }

  async *#watchJob(id: string, options: CallOptions): AsyncGenerator<Schemas['Job']> {
    for (;;) {
      const response = await this.#transport.open({
        timeoutMs: 86_400_000,
        ...options,
        method: 'GET',
        path: `/v1/jobs/${part(id)}/events`,
        headers: { accept: 'text/event-stream' },
      })
      try {
        for await (const { event, data } of readEvents(response.body!)) {
          if (event !== 'job') continue
          const job = JSON.parse(data) as Schemas['Job']
          yield job
          if (hasEnded(job)) return
        }
      } catch (error) {
        options.signal?.throwIfAborted()
        if (!(error instanceof TypeError)) throw error
      }
      const job = await this.jobs.get(id, options)
      if (hasEnded(job)) {
        yield job
        return
      }
      await sleep(reconnectMs, options.signal)
    }
  }
}

function hasEnded(job: Schemas['Job']): boolean {
  return job.state === 'done' || job.state === 'failed' || job.state === 'cancelled'
}

/**
 * Every item of a list, page after page.
 * @example for await (const key of everyItem((cursor) => heftwise.keys.list({ cursor }))) …
 */
export async function* everyItem<T>(page: (cursor: string | undefined) => Promise<Page<T>>): AsyncGenerator<T> {
  let cursor: string | undefined
  do {
    const { items, next_cursor: next } = await page(cursor)
    yield* items
    cursor = next ?? undefined
  } while (cursor !== undefined)
}

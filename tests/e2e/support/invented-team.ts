import type { Schemas } from '../../../sdk/index.ts'

/** An invented team with something in every state that the console draws, repeatable for a seed. Only for looking at pages. */
export interface InventedTeam {
  session: Schemas['Session']
  arms: Schemas['Arm'][]
  models: (Schemas['Model'] & { etag: string })[]
  versions: Record<string, Schemas['Version'][]>
  releases: Record<string, Schemas['Release'][]>
  adaptations: Schemas['Adaptation'][]
  logs: Record<string, Schemas['LogEntry'][]>
  losses: Schemas['Loss'][]
  lossVersions: Record<string, Schemas['LossVersion'][]>
  jobs: Schemas['Job'][]
  curves: Record<string, Schemas['JobCurve']>
  recordings: Schemas['Recording'][]
  keys: Schemas['Key'][]
}

export const joints = ['swivel', 'shoulder', 'upper roll', 'elbow', 'lower roll', 'wrist', 'flange']
const limits = [87, 87, 87, 87, 12, 12, 12]
const person = 'Mara Quint'
const minute = 60_000
const hour = 60 * minute
const day = 24 * hour

const id = (kind: number, number: number) => `0193a5c2-7d1e-7cc0-a${kind}00-${String(number).padStart(12, '0')}`

/** xorshift, so that a page looks the same each time. */
export function randomOf(seed: number): () => number {
  let state = seed | 1
  return () => {
    state ^= state << 13
    state ^= state >>> 17
    state ^= state << 5
    return (state >>> 0) / 4294967296
  }
}

const allActions = [
  'predict',
  'snapshot',
  'read_operation',
  'adapt',
  'post_batches',
  'freeze',
  'reset',
  'resume',
  'read_arms',
  'read_models',
  'read',
  'build',
  'release',
  'roll_back',
  'manage_keys',
  'self',
]

export function inventTeam(now: number, role: Schemas['Role'] = 'administrator'): InventedTeam {
  const ago = (ms: number) => new Date(now - ms).toISOString()
  const team = { id: id(1, 1), name: 'Kiln works' }
  const actions =
    role === 'operator'
      ? [
          'snapshot',
          'read_operation',
          'adapt',
          'freeze',
          'reset',
          'resume',
          'read_arms',
          'read_models',
          'read',
          'roll_back',
          'self',
        ]
      : role === 'reviewer'
        ? ['predict', 'snapshot', 'read_operation', 'read_arms', 'read_models', 'read', 'self']
        : role === 'engineer'
          ? allActions.filter((action) => action !== 'manage_keys')
          : allActions
  const rmse = (scale: number): Schemas['JointMetric'][] =>
    joints.map((joint, index) => ({ joint, rmse: scale * [0.42, 1.9, 0.61, 1.24, 0.083, 0.11, 0.031][index]!, unit: 'N·m' }))
  const version = (number: number, scale: number, more: Partial<Schemas['Version']> = {}): Schemas['Version'] => ({
    model: 'alder-7-base',
    version: number,
    origin: {
      kind: 'fitted',
      job: id(5, 1),
      recordings: [
        { name: 'carts-slow-1.csv', checksum: 'a1' },
        { name: 'carts-fast-2.csv', checksum: 'b2' },
      ],
    },
    network: { sizes: [21, 64, 64, 7], activation: 'relu' },
    checksum: 'b7'.repeat(32),
    metrics: {
      error: 0.031 * scale * scale,
      per_joint: rmse(scale),
      recordings: [{ name: 'carts-slow-5.csv', error: 0.03, per_joint: rmse(scale) }],
    },
    recommended: {},
    created_at: ago((8 - number) * day),
    created_by: person,
    first_released_at: number === 4 ? null : ago((8 - number) * day - hour),
    ...more,
  })
  const model = (name: string, arm: string, live: number | null, newest: number | null, number: number) => ({
    id: id(3, number),
    name,
    arm,
    description: number === 1 ? 'Feed-forward of the kiln cart loaders.' : '',
    live_version: live,
    live_since: live === null ? null : ago(2 * day + 3 * hour),
    newest_version: newest,
    archived_at: null,
    created_at: ago(30 * day),
    created_by: person,
    etag: `"${name}-7"`,
  })
  const arm = (name: string, number: number): Schemas['Arm'] => ({
    id: id(2, number),
    name,
    description: '',
    joints: joints.map((joint, index) => ({ name: joint, type: 'revolute', velocity_limit: 2, torque_limit: limits[index]! })),
    joints_fingerprint: '7c1f0a52b3de',
    gravity: [0, 0, -9.81],
    torque: { side: 'link', positive_accelerates: true, controller_adds: [] },
    fallback: 'hold_position',
    horizon: 1,
    firmware: null,
    archived_at: null,
    created_at: ago(30 * day),
    created_by: person,
  })

  const logs: InventedTeam['logs'] = {}
  const adaptation = (
    number: number,
    robot: string,
    more: Partial<Schemas['Adaptation']> & { heardAgo?: number; story?: Story },
  ): Schemas['Adaptation'] => {
    const { heardAgo = 1000, story = {}, ...rest } = more
    const name = id(4, number)
    const log = story.empty ? [] : inventLog(now - heardAgo, number, story)
    logs[name] = log
    const last = log.findLast((entry) => entry.entry === 'batch')
    return {
      id: name,
      model: 'alder-7-base',
      version: 3,
      loss: number % 3 === 0 ? 'mse' : { name: 'alder-7-payload', version: 2 },
      robot,
      context: { tool: 'two-finger clay gripper', payload_class: 'up to 3 kg' },
      scheme: 'all',
      update: { kind: 'sgd', rate: 0.0123, rows_per_step: 4, fade: 1 },
      guard: {
        step_norm: 0.5,
        torque_change: 0.15,
        drift: 0.4,
        tolerance: 0.1,
        excitation: 0.05,
        gap_periods: 5,
        rejections_before_freeze: 5,
      },
      joint_names: joints,
      state: 'adapting',
      frozen: null,
      revision: last?.revision ?? 0,
      next_sequence: (last?.sequence ?? 0) + 1,
      as_of: last?.time ?? null,
      valid_until: last?.time == null ? null : last.time + 1,
      rejections_in_a_row: 0,
      last_batch: last ?? null,
      created_at: ago(5 * hour),
      created_by: 'key kiln cell controller',
      ended_at: null,
      ...rest,
    }
  }
  const adaptations = [
    adaptation(1, 'kiln-cart-loader-1', {}),
    adaptation(2, 'kiln-cart-loader-2', {
      state: 'frozen',
      frozen: {
        reason: '5 steps rejected in a row, the last for elbow: 14 % worse than base over the last second.',
        at: ago(4 * minute),
        by: 'guard',
      },
      story: { ending: 'freeze' },
      heardAgo: 800,
    }),
    adaptation(3, 'kiln-cart-loader-3', { rejections_in_a_row: 2, story: { ending: 'reject' }, scheme: 'last_layer' }),
    adaptation(4, 'glaze-line-loader', { heardAgo: 14 * minute, scheme: 'bias', loss: 'mse' }),
    adaptation(5, 'drying-rack-1', { story: { seed: 5 } }),
    adaptation(6, 'drying-rack-2', { story: { empty: true }, created_at: ago(20_000) }),
    adaptation(7, 'kiln-cart-loader-1', {
      state: 'ended',
      ended_at: ago(5 * hour),
      heardAgo: 5 * hour,
      context: { tool: 'vacuum cup', payload_class: 'up to 1 kg' },
      created_at: ago(2 * day),
    }),
  ]

  const job = (number: number, more: Partial<Schemas['Job']>): Schemas['Job'] => ({
    id: id(5, number),
    kind: 'fit',
    state: 'done',
    progress: 1,
    message: 'Version 3 made.',
    parameters: {
      kind: 'fit',
      model: 'alder-7-base',
      hidden: [64, 64],
      activation: 'relu',
      epochs: 80,
      rows_per_step: 256,
      rate: 0.001,
      seed: 1,
    },
    result: { model: 'alder-7-base', version: 3 },
    problem: null,
    created_at: ago(number * 9 * hour),
    created_by: person,
    started_at: ago(number * 9 * hour - minute),
    ended_at: ago(number * 9 * hour - 9 * minute),
    ...more,
  })
  const jobs = [
    job(0, {
      id: id(5, 9),
      kind: 'meta_train',
      state: 'running',
      progress: 0.43,
      message: 'Update 172 of 400.',
      parameters: {
        kind: 'meta_train',
        loss: 'alder-7-payload',
        version: 3,
        scheme: 'all',
        updates: 400,
        inner_steps: 15,
        streams: 8,
        rows_per_step: 4,
        seed: 1,
      },
      result: null,
      created_at: ago(11 * minute),
      started_at: ago(10 * minute),
      ended_at: null,
    }),
    job(1, {}),
    job(2, {
      state: 'failed',
      progress: 0.12,
      message: 'The server was restarted.',
      result: null,
      problem: {
        type: 'tag:heftwise.invalid,2026:recordings-unsuitable',
        title: 'These recordings do not serve this job',
        status: 422,
        detail: 'carts-slow-1.csv never moves the wrist. Add a recording that does.',
      },
    }),
    job(3, { state: 'cancelled', progress: 0.5, message: 'Cancelled by Mara Quint.', result: null }),
  ]
  const curve = (steps: number): Schemas['JobCurve'] => {
    const random = randomOf(7)
    return {
      series: [
        {
          name: 'outer_error',
          points: Array.from({ length: steps }, (_, step) => [step * 4, 0.9 * Math.exp(-step / 14) + 0.05 + random() * 0.02]),
        },
        {
          name: 'validation_error',
          points: Array.from({ length: Math.ceil(steps / 8) }, (_, step) => [step * 32, 0.8 * Math.exp(-step / 2) + 0.07]),
        },
      ],
    }
  }
  const key = (number: number, name: string, scopes: Schemas['Scope'][], more: Partial<Schemas['Key']> = {}): Schemas['Key'] => ({
    id: id(6, number),
    name,
    scopes,
    state: 'active',
    hint: 'x9Qd',
    created_at: ago(40 * day + number * hour),
    created_by: person,
    expires_at: new Date(now + 200 * day).toISOString(),
    last_used_at: ago(number * 3000),
    overlap_until: null,
    revoked_at: null,
    ...more,
  })
  return {
    session: {
      team,
      teams: [
        { ...team, role },
        { id: id(1, 2), name: 'Test bench', role: 'engineer' },
      ],
      person: { id: id(7, 1), name: person, email: 'mara.quint@kiln.example' },
      role,
      key: null,
      scopes: [],
      csrf_token: 'token',
      simulated: true,
      actions,
    },
    arms: [arm('alder-7', 1), arm('rowan-6', 2)],
    models: [
      model('alder-7-base', 'alder-7', 3, 4, 1),
      model('rowan-6-base', 'rowan-6', null, null, 2),
      model('alder-7-wide', 'alder-7', null, 1, 3),
    ],
    versions: {
      'alder-7-base': [
        version(4, 0.86, {
          origin: {
            kind: 'promoted',
            adaptation: id(4, 1),
            revision: 112,
            parent_version: 3,
            reason: 'Better with the new gripper on all joints.',
          },
          created_at: ago(3 * hour),
        }),
        version(3, 1),
        version(2, 1.31),
        version(1, 1.9, { origin: { kind: 'imported' }, metrics: null }),
      ],
    },
    releases: {
      'alder-7-base': [
        {
          number: 5,
          kind: 'release',
          version: 3,
          previous_version: 2,
          reason: 'Fitted on the new gripper’s recordings; better on all joints.',
          at: ago(2 * day + 3 * hour),
          by: person,
        },
        {
          number: 4,
          kind: 'rollback',
          version: 2,
          previous_version: 3,
          reason: 'Elbow torque was off by 4 N·m since the morning’s release.',
          at: ago(3 * day),
          by: 'Ilja Brandt',
        },
        {
          number: 3,
          kind: 'release',
          version: 3,
          previous_version: 2,
          reason: 'First version with fast motions.',
          at: ago(3 * day + 5 * hour),
          by: person,
        },
        {
          number: 2,
          kind: 'release',
          version: 2,
          previous_version: 1,
          reason: 'Half the error of the import.',
          at: ago(6 * day),
          by: person,
        },
        {
          number: 1,
          kind: 'release',
          version: 1,
          previous_version: null,
          reason: 'To start with.',
          at: ago(7 * day),
          by: person,
        },
      ],
    },
    adaptations,
    logs,
    lossVersions: {
      'alder-7-payload': [2, 1].map((number) => ({
        loss: 'alder-7-payload',
        version: number,
        kind: 'state_dependent',
        base_version: 3,
        base_checksum: 'b7'.repeat(32),
        scheme: 'all',
        update: { kind: 'sgd', rate: 0.0123, rows_per_step: 4 },
        checksum: 'd4'.repeat(32),
        origin: { kind: 'meta_trained', job: id(5, 9) },
        validation: [
          { name: 'mse_sgd', error: 0.41, rate: 0.02 },
          { name: 'mse_adam', error: 0.37, rate: 0.001 },
          { name: 'learned', error: number === 2 ? 0.22 : 0.26, rate: 0.0123 },
        ],
        created_at: ago((3 - number) * day),
        created_by: person,
      })),
    },
    losses: [
      {
        id: id(9, 1),
        name: 'alder-7-payload',
        model: 'alder-7-base',
        kind: 'state_dependent',
        description: '',
        newest_version: 2,
        created_at: ago(9 * day),
        created_by: person,
      },
    ],
    jobs,
    curves: { [id(5, 9)]: curve(43), [id(5, 1)]: curve(80) },
    recordings: (['fit', 'fit', 'meta_train', 'validate', 'evaluate'] as const).map((use, number) => ({
      id: id(8, number),
      arm: 'alder-7',
      name: `carts-${number % 2 === 0 ? 'slow' : 'fast'}-${number + 1}.csv`,
      use,
      context: { robot: 'kiln-cart-loader-1', tool: 'two-finger clay gripper', motion: 'cart loading', payload: { mass: 1.4 } },
      rows: 60_000 + number * 1311,
      duration: 120 + number * 2.6,
      rate: 500,
      bytes: 31_000_000 + number * 700_000,
      checksum: 'c3'.repeat(32),
      created_at: ago((number + 1) * day),
      created_by: person,
    })),
    keys: [
      key(1, 'kiln cell controller', ['predict', 'adapt']),
      key(2, 'recording uploader', ['build'], { expires_at: new Date(now + 5 * day).toISOString() }),
      key(3, 'glaze line', ['predict', 'adapt', 'read'], { overlap_until: new Date(now + 20 * hour).toISOString() }),
      key(4, 'old bench', ['predict'], { state: 'revoked', revoked_at: ago(9 * day), last_used_at: null }),
      key(5, 'trial', ['read'], { state: 'expired', expires_at: ago(9 * day) }),
    ],
  }
}

interface Story {
  ending?: 'freeze' | 'reject'
  empty?: boolean
  seed?: number
}

/** Error that jumps when a payload is gripped and falls as steps are taken. */
function inventLog(until: number, number: number, story: Story): Schemas['LogEntry'][] {
  const random = randomOf(story.seed ?? number * 977)
  const length = 170
  const entries: Schemas['LogEntry'][] = []
  let level = 0.9
  let revision = 0
  let sequence = 0
  let frozen = false
  for (let step = 0; step < length; step++) {
    const at = new Date(until - (length - 1 - step) * 1280).toISOString()
    const position = step + 1
    const time = 12 + step * 1.28
    const left = length - step
    if (step === 60 || step === 130) {
      level *= 14
      entries.push({
        position,
        entry: 'event',
        sequence: ++sequence,
        revision,
        at,
        time,
        kind: 'gripped',
        payload: { mass: step === 60 ? 1.4 : 2.6 },
      })
      continue
    }
    if (step === 105) {
      level *= 6
      entries.push({ position, entry: 'event', sequence: ++sequence, revision, at, time, kind: 'released' })
      continue
    }
    if (step === 84 || (story.ending === 'freeze' && left === 12)) {
      frozen = true
      entries.push({
        position,
        entry: 'command',
        sequence: null,
        revision,
        at,
        time: null,
        command: 'freeze',
        by: step === 84 ? 'Ilja Brandt' : 'guard',
        reason: step === 84 ? 'Gripper is being changed.' : '5 steps rejected in a row.',
      })
      continue
    }
    if (step === 95) {
      frozen = false
      entries.push({
        position,
        entry: 'command',
        sequence: null,
        revision,
        at,
        time: null,
        command: 'resume',
        by: 'Ilja Brandt',
        reason: 'New gripper is on.',
      })
      continue
    }
    const rejected =
      !frozen && ((story.ending === 'freeze' && left < 18) || (story.ending === 'reject' && left < 3) || random() < 0.03)
    const stored = frozen || random() < 0.03
    const before = level * (0.75 + random() * 0.5)
    const after = stored ? null : before * (rejected ? 1.02 : 0.8 + random() * 0.1)
    if (!rejected && !stored) {
      level = Math.max(0.02, level * 0.9)
      revision++
    }
    entries.push({
      position,
      entry: 'batch',
      sequence: ++sequence,
      revision,
      at,
      time,
      rows: 64,
      skipped: 0,
      acceleration_kind: 'filtered',
      verdict: stored ? 'stored' : rejected ? 'rejected' : 'accepted',
      reasons: frozen
        ? [{ code: 'frozen', detail: 'Frozen: the batch is stored, no step is taken.' }]
        : stored
          ? [{ code: 'excitation', detail: 'Motion of 0.021 is below the 0.05 a step needs.', found: 0.021, bound: 0.05 }]
          : rejected
            ? [
                {
                  code: 'worse_than_base',
                  detail: 'elbow: 14 % worse than base on unseen rows, 10 % allowed.',
                  joint: 'elbow',
                  found: 0.14,
                  bound: 0.1,
                },
              ]
            : [],
      error: {
        before,
        after,
        per_joint: joints.map((_, index) => ({
          before: Math.sqrt(before) * [1.2, 4.1, 1.4, 2.9, 0.3, 0.32, 0.08][index]!,
          after: after === null ? null : Math.sqrt(after) * [1.2, 4.1, 1.4, 2.9, 0.3, 0.32, 0.08][index]!,
        })),
      },
      weights: joints.map((_, index) => [0.7, 1.9, 0.9, 1.6, 0.8, 0.6, 0.5][index]! * (0.9 + random() * 0.2)),
      step_norm: stored ? null : 0.05 + random() * 0.1,
    })
  }
  return entries
}

export function inventRows(position: number): Schemas['BatchRows'] {
  const random = randomOf(position * 31)
  const time = Array.from({ length: 64 }, (_, row) => 12 + position * 1.28 + row * 0.02)
  const amplitude = [11, 56, 9, 82, 1.6, 4.9, 0.6]
  const measured = time.map((at) =>
    joints.map(
      (_, joint) => amplitude[joint]! * Math.sin(at * (1.1 + joint * 0.23) + joint) + (random() - 0.5) * amplitude[joint]! * 0.05,
    ),
  )
  const predicted = measured.map((row, at) =>
    row.map((value, joint) =>
      Math.max(-limits[joint]!, Math.min(limits[joint]!, value * 1.08 + amplitude[joint]! * 0.06 * Math.sin(at / 9))),
    ),
  )
  const zeros = time.map(() => joints.map(() => 0))
  return {
    position,
    joint_names: joints,
    unit: joints.map(() => 'N·m'),
    time,
    states: { position: zeros, velocity: zeros, acceleration: zeros },
    torque: measured,
    predicted,
    torque_limits: limits,
  }
}

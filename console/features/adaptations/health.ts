import { counted } from '../../lib/numbers.ts'
import { span } from '../../lib/times.ts'
import type { Adaptation } from './adaptations.ts'

export type Health =
  | { state: 'frozen'; reason: string; by: string; at: string }
  | { state: 'rejecting'; count: number; limit: number | undefined }
  | { state: 'silent'; forMs: number }
  | { state: 'adapting' }
  | { state: 'ended' }

/** After so long without a batch a robot counts as silent: it stands still, or its controller has lost the service. */
export const silentAfterMs = 60_000

/** How an adaptation is doing, worst first: an operator has to see a frozen one before a silent one. */
export function healthOf(adaptation: Adaptation, now: number): Health {
  if (adaptation.state === 'ended') return { state: 'ended' }
  if (adaptation.state === 'frozen') {
    return { state: 'frozen', ...(adaptation.frozen ?? { reason: 'no reason given', by: 'unknown', at: adaptation.created_at }) }
  }
  const heard = Date.parse(adaptation.last_batch?.at ?? adaptation.created_at)
  if (now - heard > silentAfterMs) return { state: 'silent', forMs: now - heard }
  // One rejection that accepted steps followed asks for nothing; the service still counts it until they have proven themselves.
  if (adaptation.rejections_in_a_row > 1 || adaptation.last_batch?.verdict === 'rejected') {
    return { state: 'rejecting', count: adaptation.rejections_in_a_row, limit: adaptation.guard.rejections_before_freeze }
  }
  return { state: 'adapting' }
}

const order: Health['state'][] = ['frozen', 'rejecting', 'silent', 'adapting', 'ended']

export function urgency(health: Health): number {
  return order.indexOf(health.state)
}

/** What a person should know now, or undefined while all is well. */
export function attentionOf(adaptation: Adaptation, health: Health): string | undefined {
  switch (health.state) {
    case 'frozen':
      return health.by === 'guard' ? `Frozen by its guards: ${health.reason}` : `Frozen by ${health.by}: ${health.reason}`
    case 'rejecting':
      return health.limit === undefined
        ? `${counted(health.count, 'step')} rejected in a row`
        : `${counted(health.count, 'step')} rejected in a row; it freezes itself at ${health.limit}`
    case 'silent':
      return adaptation.last_batch === null
        ? `No batch yet, ${span(health.forMs)} after it was started`
        : `No batch for ${span(health.forMs)}; it serves revision ${adaptation.revision} unchanged`
    default:
      return undefined
  }
}

export function lossName(loss: Adaptation['loss']): string {
  return typeof loss === 'string' ? loss : `${loss.name} ${loss.version}`
}

export const schemeNames: Record<Adaptation['scheme'], string> = {
  all: 'all layers',
  last_layer: 'last layer',
  bias: 'bias per joint',
}

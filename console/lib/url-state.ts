import { useCallback } from 'react'
import { useSearchParams } from 'react-router-dom'

type Change = Record<string, string | undefined>

/** Filters, sort and page live in the address, so they survive a reload and can be sent to somebody. */
export function useUrlState(): {
  get: (name: string) => string | undefined
  set: (change: Change, options?: { push?: boolean }) => void
} {
  const [parameters, setParameters] = useSearchParams()
  const get = (name: string) => parameters.get(name) ?? undefined
  const set = useCallback(
    (change: Change, { push = false } = {}) => {
      setParameters(
        (before) => {
          const after = new URLSearchParams(before)
          for (const [name, value] of Object.entries(change)) {
            if (value === undefined || value === '') after.delete(name)
            else after.set(name, value)
          }
          return after
        },
        { replace: !push, preventScrollReset: true },
      )
    },
    [setParameters],
  )
  return { get, set }
}

/** One of a fixed list, or undefined where the address holds something else. */
export function oneOf<T extends string>(value: string | undefined, allowed: readonly T[]): T | undefined {
  return allowed.find((each) => each === value)
}

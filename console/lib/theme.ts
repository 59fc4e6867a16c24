import { useSyncExternalStore } from 'react'

export type Theme = 'system' | 'light' | 'dark'

const key = 'heftwise.theme'
const listeners = new Set<() => void>()

function read(): Theme {
  const theme = document.documentElement.dataset.theme
  return theme === 'light' || theme === 'dark' ? theme : 'system'
}

export function setTheme(theme: Theme): void {
  if (theme === 'system') delete document.documentElement.dataset.theme
  else document.documentElement.dataset.theme = theme
  remember(key, theme === 'system' ? null : theme)
  for (const listener of listeners) listener()
}

export function useTheme(): Theme {
  return useSyncExternalStore((listener) => {
    listeners.add(listener)
    return () => listeners.delete(listener)
  }, read)
}

/** Small preferences of this browser; where storage is blocked they last as long as the page. */
export function remember(name: string, value: string | null): void {
  try {
    if (value === null) localStorage.removeItem(name)
    else localStorage.setItem(name, value)
  } catch {
    // Nothing depends on it.
  }
}

export function recall(name: string): string | null {
  try {
    return localStorage.getItem(name)
  } catch {
    return null
  }
}

import { createContext, use, useCallback, useRef, useState, type ReactNode } from 'react'
import { Icon } from './icon.tsx'

const NoticeContext = createContext<(text: string) => void>(() => undefined)

/** Says that an act of one's own has been done; failures show where they happened instead. */
export function useNotice(): (text: string) => void {
  return use(NoticeContext)
}

export function NoticeProvider({ children }: { children: ReactNode }) {
  const [notice, setNotice] = useState<{ text: string; number: number }>()
  const timer = useRef<ReturnType<typeof setTimeout>>(undefined)
  const number = useRef(0)
  const say = useCallback((text: string) => {
    clearTimeout(timer.current)
    setNotice({ text, number: ++number.current })
    timer.current = setTimeout(() => setNotice(undefined), 8_000)
  }, [])
  return (
    <NoticeContext value={say}>
      {children}
      <div
        role="status"
        aria-live="polite"
        className="pointer-events-none fixed inset-x-0 bottom-4 z-50 flex justify-center px-4"
      >
        {notice && (
          <p key={notice.number} className="flex items-center gap-2 rounded-2 bg-ink px-4 py-2 text-paper">
            <Icon name="check" />
            {notice.text}
          </p>
        )}
      </div>
    </NoticeContext>
  )
}

import { useLayoutEffect, useRef, useState, type RefObject } from 'react'

/** The width of an element in CSS pixels, kept current; 0 until it is on screen. */
export function useWidth<E extends HTMLElement>(): [RefObject<E | null>, number] {
  const element = useRef<E>(null)
  const [width, setWidth] = useState(0)
  useLayoutEffect(() => {
    if (element.current === null) return
    setWidth(element.current.clientWidth)
    const observer = new ResizeObserver(([entry]) => setWidth(Math.floor(entry!.contentRect.width)))
    observer.observe(element.current)
    return () => observer.disconnect()
  }, [])
  return [element, width]
}

import * as Primitive from '@radix-ui/react-tooltip'
import type { ReactElement, ReactNode } from 'react'

export const TooltipProvider = Primitive.Provider

/** A short explanation on hover and focus. */
export function Tooltip({
  text,
  children,
  side = 'top',
}: {
  text: ReactNode
  children: ReactElement
  side?: 'top' | 'right' | 'bottom'
}) {
  return (
    <Primitive.Root>
      <Primitive.Trigger asChild>{children}</Primitive.Trigger>
      <Primitive.Portal>
        <Primitive.Content
          side={side}
          sideOffset={6}
          collisionPadding={8}
          className="z-50 max-w-72 rounded-2 bg-ink px-2 py-1 text-12 text-paper"
        >
          {text}
        </Primitive.Content>
      </Primitive.Portal>
    </Primitive.Root>
  )
}

import * as Primitive from '@radix-ui/react-dialog'
import type { ReactNode } from 'react'
import { IconButton } from './button.tsx'

interface DialogProps {
  open: boolean
  onClose: () => void
  title: string
  description?: ReactNode
  children: ReactNode
  /** Closing by Escape or a click beside it would lose something that can't be had again. */
  held?: boolean
  wide?: boolean
}

const dim = 'fixed inset-0 bg-[rgb(0_0_0/0.45)]'

/** A dialog on a dimmed page; focus stays inside and returns to where it came from. */
export function Dialog({ open, onClose, title, description, children, held = false, wide = false }: DialogProps) {
  const keep = (event: Event) => held && event.preventDefault()
  return (
    <Primitive.Root open={open} onOpenChange={(next) => !next && onClose()}>
      <Primitive.Portal>
        <Primitive.Overlay className={`${dim} z-40 grid place-items-center overflow-y-auto p-4`}>
          <Primitive.Content
            onEscapeKeyDown={keep}
            onInteractOutside={keep}
            {...(description === undefined && { 'aria-describedby': undefined })}
            className={`w-full border border-edge bg-surface p-5 ${wide ? 'max-w-2xl' : 'max-w-lg'}`}
          >
            <div className="flex items-start gap-4">
              <Primitive.Title className="grow text-20 font-semibold">{title}</Primitive.Title>
              {!held && (
                <Primitive.Close asChild>
                  <IconButton icon="close" label="Close" className="-mt-1 -mr-2" />
                </Primitive.Close>
              )}
            </div>
            {description !== undefined && (
              <Primitive.Description asChild>
                <div className="mt-2">{description}</div>
              </Primitive.Description>
            )}
            <div className="mt-4 flex flex-col gap-4">{children}</div>
          </Primitive.Content>
        </Primitive.Overlay>
      </Primitive.Portal>
    </Primitive.Root>
  )
}

/** A panel that slides over the page's left edge, for the sections on a narrow screen. */
export function Drawer({
  open,
  onClose,
  title,
  children,
}: {
  open: boolean
  onClose: () => void
  title: string
  children: ReactNode
}) {
  return (
    <Primitive.Root open={open} onOpenChange={(next) => !next && onClose()}>
      <Primitive.Portal>
        <Primitive.Overlay className={`${dim} z-40`} />
        <Primitive.Content
          aria-describedby={undefined}
          className="fixed inset-y-0 left-0 z-50 flex w-64 max-w-[85vw] flex-col overflow-y-auto border-r border-edge bg-paper"
        >
          <div className="flex items-center justify-between py-2 pr-2 pl-4">
            <Primitive.Title className="text-14 font-semibold">{title}</Primitive.Title>
            <Primitive.Close asChild>
              <IconButton icon="close" label="Close" />
            </Primitive.Close>
          </div>
          {children}
        </Primitive.Content>
      </Primitive.Portal>
    </Primitive.Root>
  )
}

export function DialogActions({ children }: { children: ReactNode }) {
  return <div className="mt-1 flex flex-wrap justify-end gap-2 max-sm:flex-col-reverse">{children}</div>
}

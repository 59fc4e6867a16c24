import * as Primitive from '@radix-ui/react-dropdown-menu'
import type { ReactElement, ReactNode } from 'react'
import { Icon, type IconName } from './icon.tsx'

export function Menu({
  trigger,
  children,
  align = 'end',
}: {
  trigger: ReactElement
  children: ReactNode
  align?: 'start' | 'end'
}) {
  return (
    <Primitive.Root modal={false}>
      <Primitive.Trigger asChild>{trigger}</Primitive.Trigger>
      <Primitive.Portal>
        <Primitive.Content
          align={align}
          sideOffset={4}
          collisionPadding={8}
          className="z-50 min-w-52 border border-edge bg-surface py-1"
        >
          {children}
        </Primitive.Content>
      </Primitive.Portal>
    </Primitive.Root>
  )
}

const entry =
  'flex min-h-8 cursor-pointer items-center gap-2 px-3 py-1 text-14 outline-none data-highlighted:bg-sunken data-disabled:cursor-not-allowed data-disabled:text-soft max-md:min-h-10'

export function MenuItem({ icon, onSelect, children }: { icon?: IconName; onSelect: () => void; children: ReactNode }) {
  return (
    <Primitive.Item className={entry} onSelect={onSelect}>
      {icon && <Icon name={icon} className="text-soft" />}
      {children}
    </Primitive.Item>
  )
}

/** One of several, with a check mark on the one in force. */
export function MenuChoice<T extends string>({
  label,
  value,
  options,
  onChange,
}: {
  label: string
  value: T
  options: { value: T; label: ReactNode }[]
  onChange: (value: T) => void
}) {
  return (
    <Primitive.RadioGroup value={value} onValueChange={(next) => onChange(next as T)}>
      <MenuLabel>{label}</MenuLabel>
      {options.map((option) => (
        <Primitive.RadioItem key={option.value} value={option.value} className={entry}>
          <span className="w-4">
            <Primitive.ItemIndicator>
              <Icon name="check" />
            </Primitive.ItemIndicator>
          </span>
          {option.label}
        </Primitive.RadioItem>
      ))}
    </Primitive.RadioGroup>
  )
}

export function MenuLabel({ children }: { children: ReactNode }) {
  return <Primitive.Label className="px-3 pt-2 pb-1 text-12 text-soft">{children}</Primitive.Label>
}

export function MenuLine() {
  return <Primitive.Separator className="my-1 h-px bg-line" />
}

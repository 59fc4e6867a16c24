import * as Primitive from '@radix-ui/react-tabs'
import type { ReactNode } from 'react'

interface Tab {
  value: string
  label: ReactNode
  content: ReactNode
}

export function Tabs({
  label,
  value,
  onChange,
  tabs,
}: {
  label: string
  value: string
  onChange: (value: string) => void
  tabs: Tab[]
}) {
  return (
    <Primitive.Root value={value} onValueChange={onChange}>
      <Primitive.List aria-label={label} className="flex gap-6 border-b border-line">
        {tabs.map((tab) => (
          <Primitive.Trigger
            key={tab.value}
            value={tab.value}
            className="-mb-px border-b-2 border-transparent py-2 font-semibold text-soft hover:text-ink data-[state=active]:border-ink data-[state=active]:text-ink"
          >
            {tab.label}
          </Primitive.Trigger>
        ))}
      </Primitive.List>
      {tabs.map((tab) => (
        <Primitive.Content key={tab.value} value={tab.value} className="pt-4">
          {tab.content}
        </Primitive.Content>
      ))}
    </Primitive.Root>
  )
}

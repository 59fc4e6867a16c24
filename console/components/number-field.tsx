import { TextField } from './field.tsx'

interface NumberFieldProps {
  label: string
  hint?: string
  /** As typed; empty leaves it to the service. */
  value: string
  onChange: (value: string) => void
  error?: string | undefined
  placeholder?: string
}

export function NumberField({ onChange, ...rest }: NumberFieldProps) {
  return <TextField {...rest} inputMode="decimal" onChange={(event) => onChange(event.target.value)} />
}

/** What is wrong with an optional whole number within [least, most]. */
export function wholeProblem(value: string, least: number, most: number): string | undefined {
  if (value.trim() === '') return undefined
  const number = Number(value)
  return Number.isInteger(number) && number >= least && number <= most ? undefined : `A whole number from ${least} to ${most}.`
}

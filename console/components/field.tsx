import { useId, type ComponentProps, type ReactNode } from 'react'

const box =
  'w-full rounded-2 border border-edge bg-surface px-2.5 py-1.5 text-14 text-ink placeholder:text-soft hover:border-ink aria-invalid:border-stop max-md:min-h-10 max-md:text-16 file:mr-3 file:cursor-pointer file:rounded-2 file:border file:border-edge file:bg-sunken file:px-2'

interface FieldProps {
  label: string
  hint?: ReactNode
  error?: string | undefined
  children: (props: {
    id: string
    'aria-describedby': string | undefined
    'aria-invalid': true | undefined
    className: string
  }) => ReactNode
}

/** A label, its control, a hint and what is wrong with it, tied together for everyone. */
export function Field({ label, hint, error, children }: FieldProps) {
  const id = useId()
  const described = [hint !== undefined && `${id}-hint`, error !== undefined && `${id}-error`].filter(Boolean).join(' ')
  return (
    <div className="flex flex-col gap-1">
      <label htmlFor={id} className="font-semibold">
        {label}
      </label>
      {children({
        id,
        'aria-describedby': described || undefined,
        'aria-invalid': error === undefined ? undefined : true,
        className: box,
      })}
      {hint !== undefined && (
        <p id={`${id}-hint`} className="text-12 text-soft">
          {hint}
        </p>
      )}
      {error !== undefined && (
        <p id={`${id}-error`} role="alert" className="text-12 font-semibold text-stop">
          {error}
        </p>
      )}
    </div>
  )
}

export function TextField({ label, hint, error, ...input }: Omit<FieldProps, 'children'> & ComponentProps<'input'>) {
  return (
    <Field label={label} hint={hint} error={error}>
      {(props) => <input type="text" autoComplete="off" {...input} {...props} />}
    </Field>
  )
}

export function SelectField({
  label,
  hint,
  error,
  children,
  ...select
}: Omit<FieldProps, 'children'> & ComponentProps<'select'>) {
  return (
    <Field label={label} hint={hint} error={error}>
      {(props) => (
        <select {...select} {...props}>
          {children}
        </select>
      )}
    </Field>
  )
}

export function TextArea({ label, hint, error, ...area }: Omit<FieldProps, 'children'> & ComponentProps<'textarea'>) {
  return (
    <Field label={label} hint={hint} error={error}>
      {(props) => <textarea rows={2} {...area} {...props} />}
    </Field>
  )
}

/** A filter above a list: its label is read out and stands inside the control's first choice. */
export function Filter({
  label,
  value,
  onChange,
  options,
  none = 'any',
}: {
  label: string
  value: string | undefined
  onChange: (value: string | undefined) => void
  options: { value: string; label: string }[]
  /** What stands where nothing is chosen. */
  none?: string
}) {
  return (
    <label className="inline-flex items-center gap-2 text-12 whitespace-nowrap text-soft">
      {label}
      <select
        className={`${box} w-auto max-w-48`}
        value={value ?? ''}
        onChange={(event) => onChange(event.target.value || undefined)}
      >
        <option value="">{none}</option>
        {options.map((option) => (
          <option key={option.value} value={option.value}>
            {option.label}
          </option>
        ))}
      </select>
    </label>
  )
}

export function Search({
  label,
  value,
  onChange,
}: {
  label: string
  value: string | undefined
  onChange: (value: string | undefined) => void
}) {
  return (
    <label className="inline-flex items-center gap-2 text-12 whitespace-nowrap text-soft">
      {label}
      <input
        type="search"
        className={`${box} w-48`}
        value={value ?? ''}
        onChange={(event) => onChange(event.target.value || undefined)}
      />
    </label>
  )
}

import { useMutation, useQuery, useQueryClient } from '@tanstack/react-query'
import { useEffect, useState } from 'react'
import { Navigate, useSearchParams } from 'react-router-dom'
import { isProblem } from '../../../sdk/index.ts'
import { Button } from '../../components/button.tsx'
import { Field, TextField } from '../../components/field.tsx'
import { Mark } from '../../components/icon.tsx'
import { LoadBar } from '../../components/load-bar.tsx'
import { InlineFailure } from '../../components/states.tsx'
import { sessionOptions, signInOptions } from '../../features/session/session.ts'
import { paths } from '../../lib/paths.ts'
import { span, useNow } from '../../lib/times.ts'

/** Only a place of this console: "//host" and "https:" would lead elsewhere. */
function wayBack(next: string | null): string {
  return next !== null && /^\/(?!\/)/.test(next) && !next.includes('\\') ? next : paths.overview()
}

export function Component() {
  const [parameters] = useSearchParams()
  const session = useQuery(sessionOptions)
  useEffect(() => {
    document.title = 'Sign in · Heftwise'
  }, [])
  if (session.data) return <Navigate to={wayBack(parameters.get('next'))} replace />
  return (
    <main className="grid min-h-dvh lg:grid-cols-[minmax(26rem,2fr)_3fr]">
      <div className="flex flex-col justify-center px-6 py-12 sm:px-12">
        <div className="mx-auto w-full max-w-sm">
          <p className="flex items-center gap-3">
            <Mark className="size-9" />
            <span className="text-20 font-semibold" style={{ fontStretch: '118%' }}>
              Heftwise
            </span>
          </p>
          <h1 className="mt-10 text-28">Sign in</h1>
          {parameters.has('next') && <p className="mt-1 text-soft">You will come back to where you were.</p>}
          <SignInForm />
          <p className="mt-10 text-12 text-soft">
            Programs don’t sign in: they carry an API key. What they can ask for is described in the{' '}
            <a href={paths.docs()} className="underline underline-offset-3">
              API’s documentation
            </a>
            .
          </p>
        </div>
      </div>
      <Plate />
    </main>
  )
}

function SignInForm() {
  const signIn = useMutation(signInOptions(useQueryClient()))
  const [email, setEmail] = useState('')
  const [password, setPassword] = useState('')
  const [shown, setShown] = useState(false)
  const [tried, setTried] = useState(false)
  const wait = useWait(signIn.error, signIn.submittedAt)
  return (
    <form
      noValidate
      className="mt-6 flex flex-col gap-4"
      onSubmit={(event) => {
        event.preventDefault()
        setTried(true)
        if (email.trim() !== '' && password !== '' && !signIn.isPending && wait === 0)
          signIn.mutate({ email: email.trim(), password })
      }}
    >
      <TextField
        label="E-mail"
        type="email"
        name="email"
        autoComplete="username"
        autoFocus
        value={email}
        onChange={(event) => setEmail(event.target.value)}
        error={tried && email.trim() === '' ? 'Your e-mail address is needed.' : undefined}
      />
      <Field label="Password" error={tried && password === '' ? 'Your password is needed.' : undefined}>
        {(props) => (
          <span className="relative block">
            <input
              {...props}
              type={shown ? 'text' : 'password'}
              name="password"
              autoComplete="current-password"
              value={password}
              onChange={(event) => setPassword(event.target.value)}
              className={`${props.className} pr-20`}
            />
            <button
              type="button"
              aria-pressed={shown}
              onClick={() => setShown(!shown)}
              className="absolute inset-y-0 right-1 px-2 text-12 font-semibold text-soft hover:text-ink"
            >
              {shown ? 'Hide' : 'Show'}
              <span className="sr-only"> password</span>
            </button>
          </span>
        )}
      </Field>
      {signIn.error && <InlineFailure error={signIn.error} />}
      <Button
        type="submit"
        look="primary"
        pending={signIn.isPending}
        blocked={wait > 0 ? 'Too many tries.' : undefined}
        className="mt-1 min-h-10"
      >
        {signIn.isPending ? 'Signing in…' : wait > 0 ? `Again in ${span(wait)}` : 'Sign in'}
      </Button>
    </form>
  )
}

/** How long the service wants no further try, counted down. */
function useWait(error: unknown, since: number): number {
  const now = useNow()
  if (!isProblem(error, 'rate-limited') || error.retryAfterMs === undefined) return 0
  return Math.max(0, since + error.retryAfterMs - now)
}

const example = [
  { joint: 'swivel', limit: 87, predicted: 8.1, measured: 7.4 },
  { joint: 'shoulder', limit: 87, predicted: -52.6, measured: -55.2 },
  { joint: 'upper roll', limit: 87, predicted: 6.3, measured: 4.9 },
  { joint: 'elbow', limit: 87, predicted: 76.4, measured: 71.8 },
  { joint: 'lower roll', limit: 12, predicted: 1.2, measured: 1.5 },
  { joint: 'wrist', limit: 12, predicted: -4.6, measured: -4.1 },
  { joint: 'flange', limit: 12, predicted: 0.4, measured: 0.5 },
]

/** What the product is, drawn: an arm at one instant. */
function Plate() {
  return (
    <div className="flex flex-col justify-center border-l border-line bg-surface px-16 max-lg:hidden">
      <div className="mx-auto w-full max-w-xl">
        <p className="text-28" style={{ fontStretch: '108%' }}>
          The torque an arm needs,
          <br />
          kept right while it works.
        </p>
        <div aria-hidden="true" className="mt-10 flex flex-col gap-3">
          {example.map((load) => (
            <div key={load.joint} className="grid grid-cols-[6rem_1fr] items-center gap-4">
              <span className="text-12 text-soft">{load.joint}</span>
              <LoadBar load={{ ...load, unit: 'N·m' }} />
            </div>
          ))}
        </div>
        <p className="mt-6 text-12 text-soft">
          An invented arm at one instant. The bar is what was predicted, the upright mark what was measured, the ticks are the
          joint’s limits.
        </p>
      </div>
    </div>
  )
}

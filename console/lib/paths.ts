type Search = Record<string, string | number | undefined>

function withSearch(path: string, search: Search = {}): string {
  const parameters = new URLSearchParams()
  for (const [name, value] of Object.entries(search)) if (value !== undefined && value !== '') parameters.set(name, String(value))
  const text = parameters.toString()
  return text === '' ? path : `${path}?${text}`
}

/** Every address of the console. */
export const paths = {
  overview: () => '/',
  signIn: (next?: string) => withSearch('/sign-in', { next }),
  adaptations: (search?: Search) => withSearch('/adaptations', search),
  adaptation: (id: string, search?: Search) => withSearch(`/adaptations/${encodeURIComponent(id)}`, search),
  models: (search?: Search) => withSearch('/models', search),
  model: (name: string, search?: Search) => withSearch(`/models/${encodeURIComponent(name)}`, search),
  losses: (search?: Search) => withSearch('/losses', search),
  loss: (name: string, search?: Search) => withSearch(`/losses/${encodeURIComponent(name)}`, search),
  arms: (search?: Search) => withSearch('/arms', search),
  arm: (name: string) => `/arms/${encodeURIComponent(name)}`,
  recordings: (search?: Search) => withSearch('/recordings', search),
  jobs: (search?: Search) => withSearch('/jobs', search),
  job: (id: string) => `/jobs/${encodeURIComponent(id)}`,
  keys: (search?: Search) => withSearch('/keys', search),
  docs: () => '/docs',
}

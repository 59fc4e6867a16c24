/** What is wrong with a name of the contract, before the server says so; undefined when it is fine. */
export function nameProblem(name: string): string | undefined {
  if (name === '') return 'A name is needed.'
  if (!/^[a-z0-9-]*$/.test(name)) return 'Only small letters, digits and hyphens.'
  return name.startsWith('-') || name.endsWith('-') ? 'It can’t begin or end with a hyphen.' : undefined
}

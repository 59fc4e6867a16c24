import { createHash } from 'node:crypto'
import { readFileSync } from 'node:fs'
import bcrypt from 'bcrypt'
import { Refusal } from '../../shared/contract/problems.ts'

/** NIST SP 800-63B-4, section 3.1.1.2: 15 characters where the password is the only factor; a block-list; no composition rules. */
export const leastLength = 15

export interface Passwords {
  hash(password: string): Promise<string>
  /** Takes as long for a person that does not exist (hash undefined) as for one that does. */
  matches(password: string, hash: string | undefined): Promise<boolean>
}

export function createPasswords({ cost }: { cost: number }): Passwords {
  let nobody: Promise<string> | undefined
  return {
    hash: (password) => bcrypt.hash(digest(password), cost),
    async matches(password, hash) {
      nobody ??= bcrypt.hash(digest('nobody'), cost)
      const isMatch = await bcrypt.compare(digest(password), hash ?? (await nobody))
      return isMatch && hash !== undefined
    },
  }
}

/** bcrypt reads 72 bytes at most, and stops at a zero byte; 44 characters of base64 carry the whole password past both limits. */
function digest(password: string): string {
  return createHash('sha256').update(password.normalize('NFC'), 'utf8').digest('base64')
}

/**
 * @param context  words a guesser would try for this person: name, e-mail, team
 * @throws {Refusal} password-unsuitable: too short, or to be expected
 */
export function requireSuitable(password: string, context: readonly string[], pointer: string): void {
  const length = [...password.normalize('NFC')].length
  if (length < leastLength) {
    refuse(pointer, `It has ${length} characters; at least ${leastLength} are needed. Several unrelated words make a good one; spaces are fine.`)
  }
  if (isExpected(password, context)) {
    refuse(pointer, 'It is one of the passwords that are tried first: common words, rows of keys, repetitions, your name or ours. Choose unrelated words.')
  }
}

function refuse(pointer: string, detail: string): never {
  throw new Refusal('password-unsuitable', detail, { errors: [{ pointer, detail }] })
}

const commonWords: readonly string[] = readFileSync(new URL('./common-passwords.txt', import.meta.url), 'utf8')
  .split('\n')
  .filter((line) => line !== '' && !line.startsWith('#'))

const rows = ['abcdefghijklmnopqrstuvwxyz', '01234567890', 'qwertyuiop', 'asdfghjkl', 'zxcvbnm', 'qwertzuiop', 'yxcvbnm', 'azertyuiop', 'qsdfghjklm', 'wxcvbn', '1qaz2wsx3edc4rfv5tgb6yhn7ujm', '1q2w3e4r5t6y7u8i9o0p']
const lookAlikes: Record<string, string> = { '0': 'o', '1': 'i', '3': 'e', '4': 'a', '5': 's', '7': 't', '@': 'a', $: 's', '!': 'i' }

/**
 * The whole password is compared, not parts of it: it is to be expected when it consists of nothing but block-listed words,
 * rows of keys, repetitions and a few digits.
 */
export function isExpected(password: string, context: readonly string[]): boolean {
  const words = new Set([...commonWords, ...context.flatMap((text) => [text, ...text.split(/[^\p{L}\p{N}]+/u)]).map(plain).filter((word) => word.length >= 3)])
  const lower = password.normalize('NFC').toLowerCase()
  const texts = new Set([plain(lower), plain([...lower].map((letter) => lookAlikes[letter] ?? letter).join(''))])
  return [...texts].some((text) => consistsOf(text, words)) || isRepetition(plain(lower))
}

function plain(text: string): string {
  return text.normalize('NFC').toLowerCase().replace(/[^\p{L}\p{N}]+/gu, '')
}

function consistsOf(text: string, words: ReadonlySet<string>): boolean {
  // reach[i]: the fewest loose characters with which the first i characters can be explained.
  const reach = [0]
  for (let end = 1; end <= text.length; end++) {
    let least = reach[end - 1]! + 1
    for (let start = Math.max(0, end - 40); start <= end - 3; start++) {
      const part = text.slice(start, end)
      if (reach[start]! < least && (words.has(part) || isRow(part) || isRepetition(part))) least = reach[start]!
    }
    reach.push(least)
  }
  return reach[text.length]! <= 4
}

function isRow(part: string): boolean {
  const backwards = [...part].reverse().join('')
  return rows.some((row) => (row + row).includes(part) || (row + row).includes(backwards))
}

function isRepetition(part: string): boolean {
  for (let size = 1; size <= Math.min(4, part.length / 2); size++) {
    if (part === part.slice(0, size).repeat(Math.ceil(part.length / size)).slice(0, part.length)) return true
  }
  return false
}

import { describe, expect, test } from 'vitest'
import { createPasswords, isExpected, leastLength, requireSuitable } from '../../server/services/passwords.ts'

/** NIST SP 800-63B-4, section 3.1.1.2, names the rules below. */
describe('a password', () => {
  test('needs 15 characters, counted as people count them', () => {
    expect(leastLength).toBe(15)
    expect(() => requireSuitable('żółty wóz zeusa', [], '/new')).not.toThrow()
    expect(() => requireSuitable('żółty wóz zeus', [], '/new')).toThrow(/14 characters/)
    expect(() => requireSuitable('🦊'.repeat(7) + 'blau', [], '/new')).toThrow(/11 characters/)
  })

  test('needs no digits, capitals or signs', () => {
    expect(() => requireSuitable('violet ladder under slow rain', [], '/new')).not.toThrow()
  })

  test('may have 64 characters and far more, and all of them count', async () => {
    const passwords = createPasswords({ cost: 4 })
    const long = 'seven quiet cranes over a cold harbour '.repeat(8)

    const hash = await passwords.hash(`${long}x`)

    expect(await passwords.matches(`${long}x`, hash)).toBe(true)
    expect(await passwords.matches(`${long}y`, hash), 'bcrypt alone would stop at 72 bytes').toBe(false)
  })

  test('with a zero byte counts past it', async () => {
    const passwords = createPasswords({ cost: 4 })

    const hash = await passwords.hash('before\0after one')

    expect(await passwords.matches('before\0after two', hash)).toBe(false)
  })

  test('is the same however its letters are composed', async () => {
    const passwords = createPasswords({ cost: 4 })

    const hash = await passwords.hash('für die größere Wärme'.normalize('NFC'))

    expect(await passwords.matches('für die größere Wärme'.normalize('NFD'), hash)).toBe(true)
  })

  test('of nobody matches nothing', async () => {
    expect(await createPasswords({ cost: 4 }).matches('nobody', undefined)).toBe(false)
  })
})

describe('the block-list', () => {
  test.each([
    'passwordpassword', 'Password12345678', 'p@ssw0rdp@ssw0rd', 'qwertyuiopasdfgh', '123456789012345', 'aaaaaaaaaaaaaaaa', 'abcabcabcabcabcabc', 'iloveyouforever1',
    'letmeinletmein!!', 'Welcome-Welcome-1', 'administrator2026', 'heftwise-heftwise', 'correct horse battery staple', '1q2w3e4r5t6y7u8i', 'robotrobotrobot',
  ])('holds %s', (password) => {
    expect(isExpected(password, [])).toBe(true)
  })

  test.each(['violet ladder under slow rain', 'quiet harbour beneath seven cranes', 'k3vd-9xq2-mm4t-aaz7-wqh2-8rty', 'zehn kleine Zinnsoldaten tanzen'])('does not hold %s', (password) => {
    expect(isExpected(password, ['ada@example.org', 'Ada Example', 'Press shop'])).toBe(false)
  })

  test('holds name, e-mail and team of the person', () => {
    expect(isExpected('imkesandvoss2026', ['imke.sandvoss@example.org', 'Imke Sandvoss', 'Lowfield Pottery'])).toBe(true)
    expect(isExpected('lowfieldpottery1', ['imke.sandvoss@example.org', 'Imke Sandvoss', 'Lowfield Pottery'])).toBe(true)
  })
})

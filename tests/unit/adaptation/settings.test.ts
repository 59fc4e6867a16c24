import { describe, expect, test } from 'vitest'
import {
  completeGuard,
  completeSettings,
  GUARD_FIELDS,
  SettingError,
  type GuardSettings,
} from '../../../shared/dynamics/index.ts'

const update = { kind: 'sgd', rate: 0.1, rowsPerStep: 4, fade: 1 } as const

describe('settings that a request leaves out', () => {
  test('come from what is recommended for the same scheme and kind of update', () => {
    const recommended = { scheme: 'all' as const, update: { ...update, rate: 0.0123, rowsPerStep: 6 } }

    expect(completeSettings({}, recommended, 1)).toMatchObject({ scheme: 'all', update: recommended.update, horizon: 1 })
    expect(completeSettings({ update: { rate: 0.5 } }, recommended, 1).update).toEqual({ ...recommended.update, rate: 0.5 })
  })

  test('do not take a rate that was found for another scheme or kind', () => {
    const recommended = { scheme: 'all' as const, update: { ...update, rate: 0.0123 } }

    expect(completeSettings({ update: { kind: 'adam' } }, recommended, 1).update.rate).not.toBe(0.0123)
    expect(completeSettings({ scheme: 'bias' }, recommended, 1).update.rate).not.toBe(0.0123)
  })

  test('let a bias fade, and nothing else', () => {
    expect(completeSettings({ scheme: 'bias' }, null, 1).update.fade).toBeLessThan(1)
    expect(completeSettings({ scheme: 'all', update: { fade: 0.5 } }, null, 1).update.fade).toBe(1)
  })
})

describe('guard settings', () => {
  test.each(Object.keys(GUARD_FIELDS) as (keyof GuardSettings)[])(
    '%s has a default within its range and refuses what is outside',
    name => {
      const { least, most } = GUARD_FIELDS[name]
      for (const scheme of ['all', 'last_layer', 'bias'] as const) {
        for (const kind of ['sgd', 'adam'] as const) {
          const value = completeGuard({}, scheme, { ...update, kind })[name]
          expect(value).toBeGreaterThanOrEqual(least)
          expect(value).toBeLessThanOrEqual(most)
        }
      }
      expect(completeGuard({ [name]: most }, 'all', update)[name]).toBe(most)
      for (const value of [least - 1, most + 1, NaN, Infinity]) {
        expect(() => completeGuard({ [name]: value }, 'all', update)).toThrow(SettingError)
      }
    },
  )

  test('count rejections in whole numbers', () => {
    expect(() => completeGuard({ rejectionsBeforeFreeze: 2.5 }, 'all', update)).toThrow(/whole numbers/)
  })

  test.each([0, -1, 11, NaN])('refuses a rate of %s', rate => {
    expect(() => completeSettings({ update: { rate } }, null, 1)).toThrow(SettingError)
  })

  test.each([0, 1.5, 1025])('refuses %s rows a step', rowsPerStep => {
    expect(() => completeSettings({ update: { rowsPerStep } }, null, 1)).toThrow(SettingError)
  })
})

import { readFileSync } from 'node:fs'
import { describe, expect, test } from 'vitest'
import { readRecordingsTable } from '../../../sdk/examples/recordings-table.ts'
import { jointsOfUrdf } from '../../../sdk/examples/urdf-joints.ts'

describe('a folder of recordings', () => {
  test('lists files with use, motion and payload', () => {
    const listed = readRecordingsTable(
      'file,motion,payload_kg,com_x_m,com_y_m,com_z_m,use\r\na.csv,sine,0,0,0,0,fit\r\nb.csv,pick,1.5,0.01,-0.02,0.1,meta_train\r\n',
    )

    expect(listed).toEqual([
      { file: 'a.csv', use: 'fit', context: { motion: 'sine' } },
      {
        file: 'b.csv',
        use: 'meta_train',
        context: { motion: 'pick', payload: { mass: 1.5, center_of_mass: [0.01, -0.02, 0.1] } },
      },
    ])
  })

  test.each([
    ['without a column for the use', 'file,motion\na.csv,sine\n', /no column "use"/],
    ['with an unknown use', 'file,use\na.csv,fun\n', /line 2: use is "fun"/],
    ['with a payload that is no number', 'file,use,payload_kg\na.csv,fit,heavy\n', /line 2: payload_kg is "heavy"/],
    ['with an empty payload', 'file,use,payload_kg\na.csv,fit,\n', /payload_kg is ""/],
    ['with a short line', 'file,use\na.csv\n', /line 2 has 1 values/],
  ])('is refused %s', (_, text, message) => {
    expect(() => readRecordingsTable(text)).toThrow(message)
  })
})

describe('joints of a URDF', () => {
  test('are the movable ones with their limits, in order', () => {
    const { name, joints } = jointsOfUrdf(readFileSync('tests/data/heron-7.urdf', 'utf8'))

    expect(name).toBe('heron-7')
    expect(joints).toHaveLength(7)
    expect(joints[0]).toEqual({
      name: 'heron_base_yaw',
      type: 'revolute',
      position_lower: -2.8,
      position_upper: 2.8,
      velocity_limit: 1.6,
      torque_limit: 150,
    })
  })

  test.each([
    ['with a DOCTYPE', '<!DOCTYPE robot><robot name="r"/>', /DOCTYPE/],
    ['of another kind', '<mujoco/>', /no URDF/],
    ['with a joint without limits', '<robot name="r"><joint name="a" type="revolute"/></robot>', /Joint a: <limit lower/],
    ['with a floating joint', '<robot name="r"><joint name="a" type="floating"/></robot>', /Joint a is floating/],
  ])('are refused from a file %s', (_, text, message) => {
    expect(() => jointsOfUrdf(text)).toThrow(message)
  })
})

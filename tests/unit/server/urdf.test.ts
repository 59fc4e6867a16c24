import { readFileSync } from 'node:fs'
import { describe, expect, it } from 'vitest'
import { importUrdf, MOST_URDF_BYTES, UrdfError } from '../../../server/services/urdf.ts'

// Of a simulated arm.
const heron = readFileSync('tests/data/heron-7.urdf', 'utf8')

describe('importing a URDF', () => {
  it('gives joints in chain order with limits, the flange frame, and nothing to complain about', () => {
    const arm = importUrdf(heron)

    expect([arm.name, arm.base, arm.tip]).toEqual(['heron-7', 'base', 'flange'])
    expect(arm.joints[1]).toEqual({
      name: 'heron_shoulder_pitch',
      kind: 'revolute',
      lower: -1.9,
      upper: 1.9,
      velocity: 1.6,
      torque: 150,
    })
    expect(arm.joints.map(({ name }) => name).at(-1)).toBe('heron_flange_roll')
    expect(arm.chain.flange.position).toEqual([0, 0, 0.06])
    expect(arm.chain.joints[3].axis).toEqual([0, -1, 0])
    expect(arm.findings).toEqual([])
  })

  it('takes a part of the chain between two named links, with gravity as given', () => {
    const arm = importUrdf(heron, { base: 'link_1', tip: 'link_4', gravity: [9.81, 0, 0] })

    expect(arm.joints.map(({ name }) => name)).toEqual(['heron_shoulder_pitch', 'heron_upper_roll', 'heron_elbow_pitch'])
    expect(arm.chain.gravity).toEqual([9.81, 0, 0])
  })

  const refused: { given: string; text: string; want: RegExp }[] = [
    { given: 'a DOCTYPE', text: `<!DOCTYPE robot [<!ENTITY a "b">]>${heron}`, want: /has a DOCTYPE\. Remove it/ },
    {
      given: 'a file that is too large',
      text: `${heron}<!--${'x'.repeat(MOST_URDF_BYTES)}-->`,
      want: /at most 1000000 are read/,
    },
    { given: 'XML that is cut short', text: heron.slice(0, 900), want: /not well-formed XML/ },
    { given: 'deep nesting', text: `<robot>${'<a>'.repeat(5000)}${'</a>'.repeat(5000)}</robot>`, want: /cannot be read as XML/ },
    { given: 'something else', text: '<svg/>', want: /outermost element is not <robot>/ },
    { given: 'a template', text: heron.replace('<robot', '<robot xmlns:xacro="x"'), want: /xacro template\. Expand it/ },
    {
      given: 'a mimic joint on the chain',
      text: heron.replace('<axis xyz="0 -1 0"/>', '<axis xyz="0 -1 0"/><mimic joint="heron_base_yaw"/>'),
      want: /joint "heron_elbow_pitch" mimics "heron_base_yaw": coupled joints cannot be described/,
    },
    {
      given: 'a floating joint',
      text: heron.replace('heron_upper_roll" type="revolute"', 'heron_upper_roll" type="floating"'),
      want: /joint "heron_upper_roll" is floating/,
    },
    {
      given: 'an unknown type',
      text: heron.replace('heron_upper_roll" type="revolute"', 'heron_upper_roll" type="ball"'),
      want: /"heron_upper_roll": type is "ball"/,
    },
    {
      given: 'a number that is none',
      text: heron.replace('mass value="3.7578"', 'mass value="3,7"'),
      want: /link "link_1": mass: value is "3,7", expected a number/,
    },
    {
      given: 'an inertia without an entry',
      text: heron.replace('izz="0.008270"', ''),
      want: /link "link_1": inertia: izz is missing/,
    },
    {
      given: 'a parent that is not there',
      text: heron.replace('<parent link="link_2"/>', '<parent link="link_9"/>'),
      want: /there is no link "link_9"/,
    },
    {
      given: 'two links of one name',
      text: heron.replace('<link name="link_2">', '<link name="link_1">'),
      want: /link "link_1" is there twice/,
    },
    {
      given: 'a loop',
      text: heron.replace('<child link="flange"/>', '<child link="link_1"/>'),
      want: /link "link_1" hangs on two joints/,
    },
    {
      given: 'two ends',
      text: heron.replace(
        '</robot>',
        '<link name="camera"/><joint name="c" type="fixed"><parent link="link_7"/><child link="camera"/></joint></robot>',
      ),
      want: /branches to "flange", "camera"\. Say which link carries the tool/,
    },
  ]
  for (const { given, text, want } of refused) {
    it(`refuses ${given}, and says what to do`, () => {
      expect(() => importUrdf(text)).toThrow(UrdfError)
      expect(() => importUrdf(text)).toThrow(want)
    })
  }

  it('refuses links that are not connected that way round', () => {
    expect(() => importUrdf(heron, { base: 'link_4', tip: 'link_2' })).toThrow(/Link "link_2" does not hang on "link_4"/)
    expect(() => importUrdf(heron, { tip: 'link_99' })).toThrow(/There is no link "link_99"/)
  })

  it('names link, rule and numbers of bodies that cannot be', () => {
    const text = heron.replace('mass value="2.6442"', 'mass value="-2"').replace('ixx="0.014369"', 'ixx="0.114369"')
    const { findings } = importUrdf(text)

    expect(findings.map(({ kind, subject, rule }) => [kind, subject, rule])).toEqual([
      ['inconsistent', 'link_3', 'positive_mass'],
      ['missing', 'link_3', 'inertial'],
      ['inconsistent', 'link_4', 'triangle_inequality'],
    ])
    expect(findings[0].message).toBe('link "link_3": mass is -2 kg, expected above 0.')
    expect(findings[2].message).toMatch(/principal moments are .* kg·m²: the largest is above the sum of the others/)
  })

  it('says which limits and masses are missing, and keeps the rest', () => {
    const text = heron
      .replace('effort="150" velocity="1.6"', 'effort="0"')
      .replace('lower="-2" upper="2" effort="100"', 'effort="100"')
      .replace(/<link name="link_7">.*?<\/link>/s, '<link name="link_7"/>')
    const { findings, joints } = importUrdf(text)

    expect(findings.map(({ subject, rule }) => [subject, rule])).toEqual([
      ['link_7', 'inertial'],
      ['heron_base_yaw', 'torque_limit'],
      ['heron_base_yaw', 'velocity_limit'],
      ['heron_elbow_pitch', 'position_limits'],
    ])
    expect(joints[0]).toMatchObject({ torque: undefined, velocity: undefined, lower: -2.8 })
  })

  it('folds in what is fixed beside the chain, and says what moves there and is left out', () => {
    const inertia = '<inertia ixx="1e-4" ixy="0" ixz="0" iyy="1e-4" iyz="0" izz="1e-4"/>'
    const beside = `<link name="finger"><inertial><mass value="0.1"/>${inertia}</inertial></link>
      <joint name="grip" type="prismatic"><parent link="flange"/><child link="finger"/>
        <limit lower="0" upper="0.05" effort="10" velocity="1"/></joint>
      <link name="camera"><inertial><mass value="0.4"/>${inertia}</inertial></link>
      <joint name="c" type="fixed"><parent link="link_7"/><child link="camera"/><origin xyz="0 0.1 0"/></joint></robot>`
    const arm = importUrdf(heron.replace('</robot>', beside), { tip: 'flange' })

    expect(arm.chain.joints[6].inertial.mass).toBeCloseTo(0.4676 + 0.4, 12)
    expect(arm.chain.joints[6].inertial.centerOfMass[1]).toBeCloseTo((0.4676 * 0.00194 + 0.4 * 0.1) / 0.8676, 12)
    expect(arm.findings).toMatchObject([{ kind: 'left_out', subject: 'finger', rule: 'branch' }])
  })
})

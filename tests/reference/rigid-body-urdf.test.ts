// Outside source: MuJoCo (Apache-2.0, npm mujoco-js) reads URDF itself, and merges fixed links into the bodies they hang on.
// What our import makes of the same file must move the same way. heron-7.urdf is of a simulated arm.
import loadMujoco from 'mujoco-js'
import type { MainModule } from 'mujoco-js'
import { readFileSync } from 'node:fs'
import { beforeAll, describe, expect, it } from 'vitest'
import { importUrdf } from '../../server/services/urdf.ts'
import { createRandom } from '../../shared/dynamics/random.ts'
import { createChain, inverseDynamics } from '../../shared/dynamics/rigid-body/index.ts'

// MuJoCo diagonalises inertias given by six entries to a few parts in 1e9; they are a part of the torque.
const RELATIVE_TOLERANCE = 1e-8

const mixed = `<robot name="mixed">
  <link name="world"/>
  <joint name="mount" type="fixed"><parent link="world"/><child link="rail"/><origin xyz="0.1 0.2 0.3" rpy="0.4 -0.5 0.6"/></joint>
  <link name="rail"/>
  <joint name="slide" type="prismatic"><parent link="rail"/><child link="carriage"/><origin xyz="0 0 0.1" rpy="0.1 0 0.2"/><axis xyz="0.6 0 0.8"/>
    <limit lower="-1" upper="1" effort="500" velocity="1"/></joint>
  <link name="carriage"><inertial><origin xyz="0.01 0.02 0.03" rpy="0.3 0.2 0.1"/><mass value="4"/>
    <inertia ixx="0.05" ixy="0.002" ixz="-0.001" iyy="0.04" iyz="0.003" izz="0.03"/></inertial></link>
  <joint name="bolt" type="fixed"><parent link="carriage"/><child link="motor"/><origin xyz="0.1 -0.1 0.05" rpy="0 0.7 0"/></joint>
  <link name="motor"><inertial><origin xyz="0 0 0.04" rpy="0 0 0.5"/><mass value="1.5"/>
    <inertia ixx="0.004" ixy="0" ixz="0" iyy="0.003" iyz="0" izz="0.002"/></inertial></link>
  <joint name="turn" type="continuous"><parent link="motor"/><child link="arm"/><origin xyz="0 0.05 0.1" rpy="1.2 0 0"/><axis xyz="0 1 0"/>
    <limit effort="50" velocity="2"/></joint>
  <link name="arm"><inertial><origin xyz="0.2 0 0"/><mass value="2"/>
    <inertia ixx="0.002" ixy="0.0005" ixz="0" iyy="0.02" iyz="0" izz="0.02"/></inertial></link>
  <joint name="weld" type="fixed"><parent link="arm"/><child link="tool"/><origin xyz="0.4 0 0" rpy="0 0 1.5"/></joint>
  <link name="tool"><inertial><mass value="0.7"/><inertia ixx="0.001" ixy="0" ixz="0" iyy="0.001" iyz="0" izz="0.001"/></inertial></link>
</robot>`

let mujoco: MainModule & { FS: { writeFile(path: string, content: string): void } }

beforeAll(async () => {
  mujoco = (await loadMujoco()) as unknown as typeof mujoco
})

describe('a URDF read by us and by MuJoCo', () => {
  const files = [
    ['the seven-joint arm heron-7', readFileSync('tests/data/heron-7.urdf', 'utf8')],
    ['a rail with a turning arm, with fixed links and turned inertial frames between', mixed],
  ]
  for (const [what, text] of files) {
    it(`has the same inverse dynamics: ${what}`, () => {
      mujoco.FS.writeFile('/robot.urdf', text)
      const model = mujoco.MjModel.loadFromXML('/robot.urdf')!
      const data = new mujoco.MjData(model)
      const chain = createChain(importUrdf(text).chain)
      const n = chain.size
      const random = createRandom(4)
      expect(model.nv).toBe(n)

      for (let state = 0; state < 5; state++) {
        const [q, qd, qdd] = [1, 2, 3].map((scale) => Float64Array.from({ length: n }, () => scale * (2 * random.uniform() - 1)))
        const tau = new Float64Array(n)
        data.qpos.set(q)
        data.qvel.set(qd)
        data.qacc.set(qdd)
        mujoco.mj_inverse(model, data)
        inverseDynamics(chain, q, qd, qdd, tau)

        const expected = Float64Array.from(data.qfrc_inverse as ArrayLike<number>)
        const largest = Math.max(...expected.map(Math.abs))
        tau.forEach((value, j) => expect(Math.abs(value - expected[j]) / largest).toBeLessThan(RELATIVE_TOLERANCE))
      }
      data.delete()
      model.delete()
    })
  }
})

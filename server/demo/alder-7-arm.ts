import type { components } from '../../shared/contract/openapi.generated.ts'
import { alder7 } from '../../shared/simulation/alder-7.ts'
import { scenario } from '../../shared/simulation/pottery.ts'
import type { DemoRecording } from '../../shared/simulation/pottery.ts'

type Schemas = components['schemas']

/** Alder-7 as the API takes it. */
export function alder7Arm(): Schemas['NewArm'] {
  return {
    name: alder7.name,
    description: 'Seven-joint arm of an invented pottery works; loads shaped clay onto kiln carts. Simulated.',
    joints: alder7.nominal.joints.map(({ name }, j) => {
      const { lower, upper, velocity, torque, torqueRate } = alder7.limits[j]
      return {
        name,
        type: 'revolute',
        position_lower: lower,
        position_upper: upper,
        velocity_limit: velocity,
        torque_limit: torque,
        torque_rate_limit: torqueRate,
      }
    }),
    gravity: [...alder7.nominal.gravity],
    torque: { side: 'link', positive_accelerates: true, controller_adds: [] },
    fallback: alder7.fallback,
    horizon: 1,
    firmware: 'simulated',
  }
}

/** A demo recording as demo.json lists it. */
export function describeRecording({ name, use, tool, motion, payload }: DemoRecording) {
  const context: Schemas['RecordingContext'] = {
    robot: scenario.robot,
    tool,
    motion,
    ...(payload && { payload: { mass: payload.mass, center_of_mass: [...payload.centerOfMass] } }),
  }
  return { file: `${name}.gz`, name, use, context }
}

import { createPrediction, StateRangeError } from '../../shared/dynamics/index.ts'
import type { Adaptation, PredictQuery, Prediction } from '../../shared/dynamics/index.ts'
import { Refusal } from '../../shared/contract/problems.ts'
import type { ServedVersion } from './live-versions.ts'

const mostRows = 4096

export interface Predictions {
  /**
   * Torques of a version. What is returned is overwritten by the next prediction: write the answer first.
   *
   * @throws {Refusal} invalid-request: a state is too far out for a torque to be computed
   */
  ofVersion(served: ServedVersion, query: PredictQuery): Prediction
  /** Likewise of an adaptation's published state; `ahead`: seconds after as_of, per row. */
  ofAdaptation(machine: Adaptation, query: PredictQuery, ahead: Float64Array | null): Prediction
}

export function createPredictions(): Predictions {
  const rooms = new Map<number, Prediction>()

  function roomFor(joints: number): Prediction {
    let room = rooms.get(joints)
    if (room === undefined) rooms.set(joints, (room = createPrediction(mostRows, joints)))
    return room
  }

  return {
    ofVersion({ predictor, arm }, query) {
      const room = roomFor(arm.jointNames.length)
      refusing(arm.jointNames, () => predictor.predict(query, room))
      return room
    },
    ofAdaptation(machine, query, ahead) {
      const { jointNames } = machine.inputs
      const room = roomFor(jointNames.length)
      refusing(jointNames, () => machine.predict(query, ahead, room))
      return room
    },
  }
}

function refusing(jointNames: readonly string[], predict: () => void): void {
  try {
    predict()
  } catch (error) {
    if (!(error instanceof StateRangeError)) throw error
    const joint = jointNames[error.joint]
    const detail = `${error.channel}: row ${error.row}, joint "${joint}" lies too far outside what the version was fitted on for a torque to be computed.`
    throw new Refusal('invalid-request', detail, { cause: error, errors: [{ pointer: `/${error.channel}/${error.row}`, row: error.row, joint, detail }] })
  }
}

export { createRigidBodyEvaluator } from './identified-base.ts'
export type { IdentifiedBase, RigidBodyEvaluator } from './identified-base.ts'
export { defaultIdentificationOptions, errorsPerJoint, identifyBase } from './identify.ts'
export type { Identification, IdentificationOptions, IdentificationProgress, IdentifiedParameter } from './identify.ts'

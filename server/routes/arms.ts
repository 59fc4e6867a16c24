import { Router } from 'express'
import type { components } from '../../shared/contract/openapi.generated.ts'
import type { Contract } from '../middleware/contract.ts'
import { answerPage } from '../middleware/page-answer.ts'
import type { StoredJoint } from '../models/arm.ts'
import type { ArmRecord, NewArm } from '../services/arms.ts'
import { inspectDescription, type InspectedDescription } from '../services/descriptions.ts'
import type { Services } from '../services/index.ts'

type Schemas = components['schemas']

export function armRoutes({ arms }: Services, contract: Contract): Router {
  const router = Router()

  router.get(
    '/v1/arms',
    contract.handle('listArms', async ({ caller, query }, res, req) => {
      const page = await arms.list(caller, { cursor: query.cursor, limit: query.limit!, archived: query.archived })
      answerPage(req, res, { ...page, items: page.items.map(armToWire) })
    }),
  )

  router.post(
    '/v1/arms',
    contract.handle('createArm', async ({ caller, body, requestId }, res) => {
      const arm = await arms.create(caller, armFromWire(body), requestId)
      res.status(201).location(`/v1/arms/${arm.name}`).json(armToWire(arm))
    }),
  )

  router.post(
    '/v1/arms/inspect',
    contract.handle('inspectDescription', async ({ caller, body }, res) => {
      const { urdf, base_link: baseLink, tip_link: tipLink } = body
      res.json(inspectedToWire(inspectDescription(caller, { urdf, baseLink, tipLink })))
    }),
  )

  router.get(
    '/v1/arms/:arm',
    contract.handle('getArm', async ({ caller, path }, res) => {
      res.json(armToWire(await arms.get(caller, path.arm)))
    }),
  )

  router.post(
    '/v1/arms/:arm/archive',
    contract.handle('archiveArm', async ({ caller, path, body, requestId }, res) => {
      res.json(armToWire(await arms.archive(caller, path.arm, body.reason, requestId)))
    }),
  )

  return router
}

export function armFromWire(body: Schemas['NewArm']): NewArm {
  return {
    name: body.name,
    description: body.description,
    joints: body.joints.map((joint): StoredJoint => ({
      name: joint.name,
      type: joint.type,
      positionLower: joint.position_lower,
      positionUpper: joint.position_upper,
      velocityLimit: joint.velocity_limit,
      torqueLimit: joint.torque_limit,
      torqueRateLimit: joint.torque_rate_limit,
    })),
    gravity: body.gravity,
    torque: {
      side: body.torque.side,
      positiveAccelerates: body.torque.positive_accelerates,
      controllerAdds: body.torque.controller_adds,
    },
    fallback: body.fallback,
    horizon: body.horizon,
    firmware: body.firmware,
  }
}

function armToWire(arm: ArmRecord): Schemas['Arm'] {
  return {
    id: arm.id,
    name: arm.name,
    description: arm.description,
    joints: arm.joints.map((joint) => ({
      name: joint.name,
      type: joint.type,
      position_lower: joint.positionLower,
      position_upper: joint.positionUpper,
      velocity_limit: joint.velocityLimit,
      torque_limit: joint.torqueLimit,
      torque_rate_limit: joint.torqueRateLimit,
    })),
    joints_fingerprint: arm.jointsFingerprint,
    gravity: [...arm.gravity],
    torque: {
      side: arm.torque.side,
      positive_accelerates: arm.torque.positiveAccelerates,
      controller_adds: arm.torque.controllerAdds,
    },
    fallback: arm.fallback,
    horizon: arm.horizon,
    firmware: arm.firmware,
    archived_at: arm.archivedAt?.toISOString() ?? null,
    created_at: arm.createdAt.toISOString(),
    created_by: arm.createdBy,
  }
}

function inspectedToWire({ arm, links, tips, moved }: InspectedDescription): Schemas['InspectedDescription'] {
  return {
    robot: arm.name,
    links: [...links],
    tips: [...tips],
    base_link: arm.base,
    tip_link: arm.tip,
    joints: arm.joints.map((joint) => ({
      name: joint.name,
      type: joint.kind,
      position_lower: joint.lower,
      position_upper: joint.upper,
      velocity_limit: joint.velocity,
      torque_limit: joint.torque,
    })),
    rigid_body: {
      links: arm.chain.joints.map(({ name, inertial }) => ({
        name: moved.get(name)!,
        mass: inertial.mass,
        center_of_mass: [...inertial.centerOfMass],
        inertia: [...inertial.inertia],
      })),
    },
    findings: arm.findings.map(({ kind, subject, rule, message }) => ({ kind, subject, rule, detail: message })),
  }
}

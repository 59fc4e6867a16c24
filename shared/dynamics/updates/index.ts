import { adam } from './adam.ts'
import { sgd } from './sgd.ts'
import type { UpdateKind, UpdateName } from './update.ts'

export type { UpdateKind, UpdateName } from './update.ts'

/**
 * All kinds of update, by the name they have in the contract. To add one: a file beside these with an `UpdateKind`, its
 * name in `UpdateName`, one line here.
 */
export const updateKinds: Readonly<Record<UpdateName, UpdateKind>> = { sgd, adam }

import { useMutation, useQueryClient } from '@tanstack/react-query'
import type { ReactNode } from 'react'
import { useNavigate } from 'react-router-dom'
import { ActDialog } from '../../components/act-dialog.tsx'
import { useNotice } from '../../components/notices.tsx'
import { Caution } from '../../components/states.tsx'
import { paths } from '../../lib/paths.ts'
import { commandOptions, promoteOptions, type Adaptation, type Command } from './adaptations.ts'

interface Words {
  title: string
  act: string
  consequence: ReactNode
  done: string
  destructive?: boolean
}

function words(command: Command, { robot, revision, model, version, state }: Adaptation): Words {
  switch (command) {
    case 'freeze':
      return {
        title: `Freeze ${robot}`,
        act: 'Freeze',
        consequence: `It stops learning at once and goes on serving revision ${revision}, whose validity ends with the arm’s horizon: a controller that keeps to it then does without. Batches that arrive are stored, without a step.`,
        done: `${robot} is frozen.`,
        destructive: true,
      }
    case 'resume':
      return {
        title: `Resume ${robot}`,
        act: 'Resume',
        consequence: `It learns again from the next batch on, starting from revision ${revision}. What was stored meanwhile is not learned from.`,
        done: `${robot} adapts again.`,
      }
    case 'reset':
      return {
        title: `Reset ${robot}`,
        act: 'Reset',
        consequence: `What it has learned is no longer served: from the next request on it predicts what ${model} version ${version} does, as a new revision.${state === 'frozen' ? ' It stays frozen.' : ''} Its log stays.`,
        done: `${robot} serves version ${version} of ${model} again.`,
        destructive: true,
      }
    case 'end':
      return {
        title: `End the adaptation of ${robot}`,
        act: 'End it',
        consequence:
          'It serves nothing and takes nothing from now on: the controller’s next request is refused and its fallback takes over. This can’t be undone. Its log stays.',
        done: `The adaptation of ${robot} has ended.`,
        destructive: true,
      }
  }
}

const cautions: Partial<Record<Command, string>> = {
  resume:
    'An adapting model can move a machine that can injure. Be sure why it was frozen, and keep the controller’s own torque, speed and collision limits active.',
  reset: 'Torques change at once, and the arm may be gripping something. Reset at standstill where you can.',
}

export function CommandDialog({
  adaptation,
  command,
  onClose,
}: {
  adaptation: Adaptation
  command: Command
  onClose: () => void
}) {
  const client = useQueryClient()
  const say = useNotice()
  const run = useMutation(commandOptions(client, adaptation.id))
  const { done, ...shown } = words(command, adaptation)
  return (
    <ActDialog
      {...shown}
      onClose={onClose}
      pending={run.isPending}
      error={run.error}
      onAct={(reason) =>
        run.mutate(
          { command, reason },
          {
            onSuccess: () => {
              say(done)
              onClose()
            },
          },
        )
      }
    >
      {cautions[command] && <Caution>{cautions[command]}</Caution>}
    </ActDialog>
  )
}

export function PromoteDialog({ adaptation, onClose }: { adaptation: Adaptation; onClose: () => void }) {
  const client = useQueryClient()
  const say = useNotice()
  const navigate = useNavigate()
  const promote = useMutation(promoteOptions(client, adaptation.id))
  return (
    <ActDialog
      title={`Promote ${adaptation.robot}, revision ${adaptation.revision}`}
      act="Promote"
      consequence={`Its state becomes a new version of ${adaptation.model}, with where it came from. Nothing is released by that: version and adaptation go on serving as they do now.`}
      onClose={onClose}
      pending={promote.isPending}
      error={promote.error}
      onAct={(reason) =>
        promote.mutate(reason, {
          onSuccess: (version) => {
            say(`Version ${version.version} of ${version.model} made.`)
            void navigate(paths.model(version.model, { version: version.version }))
          },
        })
      }
    />
  )
}

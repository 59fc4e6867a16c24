import { createHash } from 'node:crypto'
import { readFileSync } from 'node:fs'
import { gunzipSync } from 'node:zlib'
import { describe, expect, it } from 'vitest'
import { alder7Arm, describeRecording } from '../../../server/demo/alder-7-arm.ts'
import { lossFromWire, versionFromWire } from '../../../shared/contract/snapshots.ts'
import { encodeLossVersion } from '../../../shared/dynamics/loss-version.ts'
import { encodeVersion } from '../../../shared/dynamics/version.ts'
import { demoRecordings, scenario } from '../../../shared/simulation/pottery.ts'
import { toCsv } from '../../../shared/simulation/recording.ts'

const folder = new URL('../../../server/demo/artefacts/', import.meta.url)
const read = (file: string): string => gunzipSync(readFileSync(new URL(file, folder))).toString()
const demo = JSON.parse(readFileSync(new URL('demo.json', folder), 'utf8'))
const sha256 = (bytes: Uint8Array): string => createHash('sha256').update(bytes).digest('hex')

describe('the artefacts of the first run', () => {
  it('are those that the demo would make again: arm, names, and a recording to the last digit', () => {
    const inRepository = new Map(demo.recordings.map((recording: { name: string }) => [recording.name, recording]))
    const remade = demoRecordings().filter(({ name }) => inRepository.has(name))

    expect(demo.arm).toEqual(alder7Arm())
    expect(demo.model.name).toBe(scenario.model)
    expect(remade.map(describeRecording)).toEqual(demo.recordings)
    const grips = remade.find(({ name }) => name === 'grip-release-01.csv')!
    expect(sha256(Buffer.from(toCsv(grips.make())))).toBe(sha256(Buffer.from(read('grip-release-01.csv.gz'))))
  })

  it('hold a version and a loss for it whose checksums are those of their bytes', () => {
    const [version, loss] = [JSON.parse(read(demo.version)), JSON.parse(read(demo.loss_version))]

    expect(sha256(encodeVersion(versionFromWire(version.description, version.parameters)))).toBe(version.checksum)
    expect(sha256(encodeLossVersion(lossFromWire(loss)))).toBe(loss.checksum)
    expect(loss.base_checksum).toBe(version.checksum)
  })
})

import { statfsSync } from 'node:fs'
import { StartError } from './start-error.ts'

/** What MariaDB lays out at its first start, with room to work. */
const firstStartBytes = 300e6
const nearlyFullBytes = 20e6

/** @throws {StartError} too little is free to start in this folder */
export function requireDiskSpace(folder: string, isFirstStart: boolean): void {
  const free = freeBytes(folder)
  if (free < (isFirstStart ? firstStartBytes : nearlyFullBytes)) throw diskFull(folder)
}

/** Is a full disk the likely reason of an error? MariaDB's words for it differ with what it was doing. */
export function isDiskFull(folder: string, told: string): boolean {
  return /No space left|No more room|Errcode: 28\b|errno: 28\b|OS error: 28\b|error number 28\b|Got error 28\b|ENOSPC|is full\b/.test(told) || freeBytes(folder) < nearlyFullBytes
}

export function diskFull(folder: string, cause?: unknown): StartError {
  const free = Math.floor(freeBytes(folder) / 1e6)
  return new StartError(`The disk that holds ${folder} is full: ${free} MB are free, at least ${firstStartBytes / 1e6} MB are needed. Free some space, or name another folder in HEFTWISE_DATA_DIR.`, cause)
}

function freeBytes(folder: string): number {
  const { bavail, bsize } = statfsSync(folder)
  return bavail * bsize
}

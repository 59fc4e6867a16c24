// Coverage of motion rows in f64, to the bit what ../../coverage.ts computes: lanes are rows, so no sum changes its order.
//
// Statistics in memory, f64 each: d99, low (channels), high (channels), mean (channels), lower triangle of the whitening.

/** Rows in a block: four registers of two, enough to hide the latency of an addition. */
const blockRows: i32 = 8
const blockBytes: usize = 64

/** Bytes of the work area: one block of centred rows, and how many channels of each row lie inside. */
export function coverageWorkBytes(channels: i32): usize {
  return <usize>channels * blockBytes + blockBytes
}

/**
 * Coverage of rows, 0 to 1.
 *
 * @param position  rows × joints, f64; velocity, acceleration likewise
 * @param out  one f64 per row
 */
export function coverage(
  statistics: usize, position: usize, velocity: usize, acceleration: usize, joints: i32, rows: i32, work: usize, out: usize,
): void {
  const channels = 3 * joints
  const rowBytes = <usize>joints << 3
  const inside = work + <usize>channels * blockBytes
  while (rows > 0) {
    const count = min(rows, blockRows)
    for (let row = 0; row < count; row++) {
      const lane = <usize>row << 3
      store<f64>(inside + lane, 0)
      centrePart(statistics, position, 0, joints, channels, work + lane, inside + lane)
      centrePart(statistics, velocity, joints, joints, channels, work + lane, inside + lane)
      centrePart(statistics, acceleration, 2 * joints, joints, channels, work + lane, inside + lane)
      position += rowBytes
      velocity += rowBytes
      acceleration += rowBytes
    }
    const whitening = statistics + (<usize>(1 + 3 * channels) << 3)
    // A block of one or two costs more than those rows alone; lanes without a row hold what was there before.
    if (count > 2) {
      finishBlock(statistics, whitening, channels, work, inside)
    } else {
      for (let lane: usize = 0; lane < <usize>count << 3; lane += 8) {
        finishRow(statistics, whitening, channels, work + lane, inside + lane)
      }
    }
    for (let row = 0; row < count; row++, out += 8) store<f64>(out, load<f64>(inside + (<usize>row << 3)))
    rows -= count
  }
}

/** One row's position, velocity or acceleration: counts what lies inside, and takes the mean off. */
function centrePart(
  statistics: usize, values: usize, first: i32, joints: i32, channels: i32, centred: usize, inside: usize,
): void {
  let low = statistics + (<usize>(1 + first) << 3)
  const next = <usize>channels << 3
  let to = centred + <usize>first * blockBytes
  let count: f64 = load<f64>(inside)
  for (const end = values + (<usize>joints << 3); values < end; values += 8, low += 8, to += blockBytes) {
    const value = load<f64>(values)
    if (value >= load<f64>(low) && value <= load<f64>(low + next)) count += 1
    store<f64>(to, value - load<f64>(low + 2 * next))
  }
  store<f64>(inside, count)
}

// @ts-ignore: decorator
@inline
function shareOf(statistics: usize, channels: i32, inside: f64, squared: f64): f64 {
  const d99 = load<f64>(statistics)
  const distance = sqrt<f64>(squared)
  return (inside / <f64>channels) * (distance > d99 ? d99 / distance : 1)
}

function finishRow(statistics: usize, whitening: usize, channels: i32, centred: usize, inside: usize): void {
  let squared: f64 = 0
  for (let i = 0; i < channels; i++) {
    let sum: f64 = 0
    let at = centred
    for (let j = 0; j <= i; j++, whitening += 8, at += blockBytes) sum += load<f64>(whitening) * load<f64>(at)
    squared += sum * sum
  }
  store<f64>(inside, shareOf(statistics, channels, load<f64>(inside), squared))
}

function finishBlock(statistics: usize, whitening: usize, channels: i32, centred: usize, inside: usize): void {
  let q0 = f64x2.splat(0), q1 = q0, q2 = q0, q3 = q0
  for (let i = 0; i < channels; i++) {
    let s0 = f64x2.splat(0), s1 = s0, s2 = s0, s3 = s0
    let at = centred
    for (const end = whitening + (<usize>(i + 1) << 3); whitening < end; whitening += 8, at += blockBytes) {
      const w = v128.load64_splat(whitening)
      s0 = f64x2.add(s0, f64x2.mul(w, v128.load(at)))
      s1 = f64x2.add(s1, f64x2.mul(w, v128.load(at, 16)))
      s2 = f64x2.add(s2, f64x2.mul(w, v128.load(at, 32)))
      s3 = f64x2.add(s3, f64x2.mul(w, v128.load(at, 48)))
    }
    q0 = f64x2.add(q0, f64x2.mul(s0, s0))
    q1 = f64x2.add(q1, f64x2.mul(s1, s1))
    q2 = f64x2.add(q2, f64x2.mul(s2, s2))
    q3 = f64x2.add(q3, f64x2.mul(s3, s3))
  }
  finishPair(statistics, channels, q0, inside)
  finishPair(statistics, channels, q1, inside + 16)
  finishPair(statistics, channels, q2, inside + 32)
  finishPair(statistics, channels, q3, inside + 48)
}

// @ts-ignore: decorator
@inline
function finishPair(statistics: usize, channels: i32, squared: v128, inside: usize): void {
  store<f64>(inside, shareOf(statistics, channels, load<f64>(inside), f64x2.extract_lane(squared, 0)))
  store<f64>(inside, shareOf(statistics, channels, load<f64>(inside, 8), f64x2.extract_lane(squared, 1)), 8)
}

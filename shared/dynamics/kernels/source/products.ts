// The three matrix products everything else is made of. Matrices are row-major f32 whose rows are padded with zeros to a
// multiple of 8 values; strides are bytes. In multiplyAdd every sum runs over its index in rising order whatever the
// blocking, so a row is the same to the bit in a block of four and alone: what is served does not depend on batching.

/**
 * y = c + x w.
 *
 * @param x  rows × depth; depth is a multiple of 8
 * @param w  depth × width
 * @param c  what the sums start from: a bias row (cStride 0) or y itself (cStride = yStride)
 * @param y  rows × width
 * @param width  bytes of a row of w, y and c: a multiple of 32
 */
export function multiplyAdd(
  x: usize, xStride: usize, depth: i32, w: usize, c: usize, cStride: usize, y: usize, width: usize, rows: i32,
): void {
  for (; rows >= 4; rows -= 4) {
    multiplyAddFourRows(x, xStride, depth, w, c, cStride, y, width)
    x += 4 * xStride
    c += 4 * cStride
    y += 4 * width
  }
  for (; rows > 0; rows--) {
    multiplyAddOneRow(x, depth, w, c, y, width)
    x += xStride
    c += cStride
    y += width
  }
}

function multiplyAddFourRows(
  x: usize, xStride: usize, depth: i32, w: usize, c: usize, cStride: usize, y: usize, width: usize,
): void {
  const xEnd = x + (<usize>depth << 2)
  for (let column: usize = 0; column < width; column += 32) {
    let at = c + column
    let y00 = v128.load(at), y01 = v128.load(at, 16)
    at += cStride
    let y10 = v128.load(at), y11 = v128.load(at, 16)
    at += cStride
    let y20 = v128.load(at), y21 = v128.load(at, 16)
    at += cStride
    let y30 = v128.load(at), y31 = v128.load(at, 16)
    let row = w + column
    for (let x0 = x; x0 < xEnd; x0 += 8) {
      const x1 = x0 + xStride
      const x2 = x1 + xStride
      const x3 = x2 + xStride
      let w0 = v128.load(row), w1 = v128.load(row, 16)
      let s = v128.load32_splat(x0)
      y00 = f32x4.add(y00, f32x4.mul(s, w0))
      y01 = f32x4.add(y01, f32x4.mul(s, w1))
      s = v128.load32_splat(x1)
      y10 = f32x4.add(y10, f32x4.mul(s, w0))
      y11 = f32x4.add(y11, f32x4.mul(s, w1))
      s = v128.load32_splat(x2)
      y20 = f32x4.add(y20, f32x4.mul(s, w0))
      y21 = f32x4.add(y21, f32x4.mul(s, w1))
      s = v128.load32_splat(x3)
      y30 = f32x4.add(y30, f32x4.mul(s, w0))
      y31 = f32x4.add(y31, f32x4.mul(s, w1))
      row += width
      w0 = v128.load(row)
      w1 = v128.load(row, 16)
      s = v128.load32_splat(x0, 4)
      y00 = f32x4.add(y00, f32x4.mul(s, w0))
      y01 = f32x4.add(y01, f32x4.mul(s, w1))
      s = v128.load32_splat(x1, 4)
      y10 = f32x4.add(y10, f32x4.mul(s, w0))
      y11 = f32x4.add(y11, f32x4.mul(s, w1))
      s = v128.load32_splat(x2, 4)
      y20 = f32x4.add(y20, f32x4.mul(s, w0))
      y21 = f32x4.add(y21, f32x4.mul(s, w1))
      s = v128.load32_splat(x3, 4)
      y30 = f32x4.add(y30, f32x4.mul(s, w0))
      y31 = f32x4.add(y31, f32x4.mul(s, w1))
      row += width
    }
    at = y + column
    v128.store(at, y00)
    v128.store(at, y01, 16)
    at += width
    v128.store(at, y10)
    v128.store(at, y11, 16)
    at += width
    v128.store(at, y20)
    v128.store(at, y21, 16)
    at += width
    v128.store(at, y30)
    v128.store(at, y31, 16)
  }
}

function multiplyAddOneRow(x: usize, depth: i32, w: usize, c: usize, y: usize, width: usize): void {
  const xEnd = x + (<usize>depth << 2)
  let column: usize = 0
  for (; column + 128 <= width; column += 128) {
    let at = c + column
    let y0 = v128.load(at), y1 = v128.load(at, 16), y2 = v128.load(at, 32), y3 = v128.load(at, 48)
    let y4 = v128.load(at, 64), y5 = v128.load(at, 80), y6 = v128.load(at, 96), y7 = v128.load(at, 112)
    let row = w + column
    for (let xi = x; xi < xEnd; xi += 4) {
      const s = v128.load32_splat(xi)
      y0 = f32x4.add(y0, f32x4.mul(s, v128.load(row)))
      y1 = f32x4.add(y1, f32x4.mul(s, v128.load(row, 16)))
      y2 = f32x4.add(y2, f32x4.mul(s, v128.load(row, 32)))
      y3 = f32x4.add(y3, f32x4.mul(s, v128.load(row, 48)))
      y4 = f32x4.add(y4, f32x4.mul(s, v128.load(row, 64)))
      y5 = f32x4.add(y5, f32x4.mul(s, v128.load(row, 80)))
      y6 = f32x4.add(y6, f32x4.mul(s, v128.load(row, 96)))
      y7 = f32x4.add(y7, f32x4.mul(s, v128.load(row, 112)))
      row += width
    }
    at = y + column
    v128.store(at, y0)
    v128.store(at, y1, 16)
    v128.store(at, y2, 32)
    v128.store(at, y3, 48)
    v128.store(at, y4, 64)
    v128.store(at, y5, 80)
    v128.store(at, y6, 96)
    v128.store(at, y7, 112)
  }
  for (; column < width; column += 32) {
    let y0 = v128.load(c + column), y1 = v128.load(c + column, 16)
    let row = w + column
    for (let xi = x; xi < xEnd; xi += 4) {
      const s = v128.load32_splat(xi)
      y0 = f32x4.add(y0, f32x4.mul(s, v128.load(row)))
      y1 = f32x4.add(y1, f32x4.mul(s, v128.load(row, 16)))
      row += width
    }
    v128.store(y + column, y0)
    v128.store(y + column, y1, 16)
  }
}

/**
 * x = y wᵀ, or x += y wᵀ.
 *
 * @param y  rows × width, rows one after the other
 * @param width  bytes of a row of y and w: a multiple of 32
 * @param w  depth × width; depth is a multiple of 4
 * @param x  rows × depth
 */
export function multiplyTransposed(
  y: usize, width: usize, w: usize, depth: i32, rows: i32, x: usize, xStride: usize, add: bool,
): void {
  for (; rows >= 2; rows -= 2) {
    multiplyTransposedTwoRows(y, width, w, depth, x, xStride, add)
    y += 2 * width
    x += 2 * xStride
  }
  if (rows > 0) multiplyTransposedOneRow(y, width, w, depth, x, add)
}

/** Sums of four registers, one in each lane. */
// @ts-ignore: decorator
@inline
function sumLanes(a: v128, b: v128, c: v128, d: v128): v128 {
  const ab = f32x4.add(v128.shuffle<f32>(a, b, 0, 4, 1, 5), v128.shuffle<f32>(a, b, 2, 6, 3, 7))
  const cd = f32x4.add(v128.shuffle<f32>(c, d, 0, 4, 1, 5), v128.shuffle<f32>(c, d, 2, 6, 3, 7))
  return f32x4.add(v128.shuffle<f32>(ab, cd, 0, 1, 4, 5), v128.shuffle<f32>(ab, cd, 2, 3, 6, 7))
}

function multiplyTransposedTwoRows(
  y: usize, width: usize, w: usize, depth: i32, x: usize, xStride: usize, add: bool,
): void {
  const end = y + width
  const xEnd = x + (<usize>depth << 2)
  for (; x < xEnd; x += 16, w += 4 * width) {
    let a0 = f32x4.splat(0), a1 = a0, a2 = a0, a3 = a0
    let b0 = a0, b1 = a0, b2 = a0, b3 = a0
    let w0 = w
    for (let at = y; at < end; at += 16, w0 += 16) {
      const ya = v128.load(at)
      const yb = v128.load(at + width)
      const w1 = w0 + width
      const w2 = w1 + width
      let row = v128.load(w0)
      a0 = f32x4.add(a0, f32x4.mul(ya, row))
      b0 = f32x4.add(b0, f32x4.mul(yb, row))
      row = v128.load(w1)
      a1 = f32x4.add(a1, f32x4.mul(ya, row))
      b1 = f32x4.add(b1, f32x4.mul(yb, row))
      row = v128.load(w2)
      a2 = f32x4.add(a2, f32x4.mul(ya, row))
      b2 = f32x4.add(b2, f32x4.mul(yb, row))
      row = v128.load(w2 + width)
      a3 = f32x4.add(a3, f32x4.mul(ya, row))
      b3 = f32x4.add(b3, f32x4.mul(yb, row))
    }
    let a = sumLanes(a0, a1, a2, a3)
    let b = sumLanes(b0, b1, b2, b3)
    if (add) {
      a = f32x4.add(v128.load(x), a)
      b = f32x4.add(v128.load(x + xStride), b)
    }
    v128.store(x, a)
    v128.store(x + xStride, b)
  }
}

function multiplyTransposedOneRow(y: usize, width: usize, w: usize, depth: i32, x: usize, add: bool): void {
  const end = y + width
  const xEnd = x + (<usize>depth << 2)
  for (; x < xEnd; x += 16, w += 4 * width) {
    let a0 = f32x4.splat(0), a1 = a0, a2 = a0, a3 = a0
    let w0 = w
    for (let at = y; at < end; at += 16, w0 += 16) {
      const ya = v128.load(at)
      const w1 = w0 + width
      const w2 = w1 + width
      a0 = f32x4.add(a0, f32x4.mul(ya, v128.load(w0)))
      a1 = f32x4.add(a1, f32x4.mul(ya, v128.load(w1)))
      a2 = f32x4.add(a2, f32x4.mul(ya, v128.load(w2)))
      a3 = f32x4.add(a3, f32x4.mul(ya, v128.load(w2 + width)))
    }
    const a = sumLanes(a0, a1, a2, a3)
    v128.store(x, add ? f32x4.add(v128.load(x), a) : a)
  }
}

/**
 * g += xᵀ y, and the bias row += the column sums of y.
 *
 * @param x  rows × inputs (its padding is not read)
 * @param y  rows × width, rows one after the other
 * @param g  inputs × width
 * @param bias  width; 0: left out
 */
export function addOuter(
  x: usize, xStride: usize, inputs: i32, y: usize, width: usize, rows: i32, g: usize, bias: usize,
): void {
  for (; rows >= 4; rows -= 4) {
    addOuterFourRows(x, xStride, inputs, y, width, g, bias)
    x += 4 * xStride
    y += 4 * width
  }
  for (; rows > 0; rows--) {
    addOuterOneRow(x, inputs, y, width, g, bias)
    x += xStride
    y += width
  }
}

function addOuterFourRows(x: usize, xStride: usize, inputs: i32, y: usize, width: usize, g: usize, bias: usize): void {
  const xEnd = x + (<usize>inputs << 2)
  for (let column: usize = 0; column < width; column += 32) {
    let at = y + column
    const y00 = v128.load(at), y01 = v128.load(at, 16)
    at += width
    const y10 = v128.load(at), y11 = v128.load(at, 16)
    at += width
    const y20 = v128.load(at), y21 = v128.load(at, 16)
    at += width
    const y30 = v128.load(at), y31 = v128.load(at, 16)
    if (bias) {
      at = bias + column
      v128.store(at, f32x4.add(v128.load(at), f32x4.add(f32x4.add(y00, y10), f32x4.add(y20, y30))))
      v128.store(at, f32x4.add(v128.load(at, 16), f32x4.add(f32x4.add(y01, y11), f32x4.add(y21, y31))), 16)
    }
    let row = g + column
    for (let x0 = x; x0 < xEnd; x0 += 4) {
      const x1 = x0 + xStride
      const x2 = x1 + xStride
      let s = v128.load32_splat(x0)
      let g0 = f32x4.mul(s, y00)
      let g1 = f32x4.mul(s, y01)
      s = v128.load32_splat(x1)
      g0 = f32x4.add(g0, f32x4.mul(s, y10))
      g1 = f32x4.add(g1, f32x4.mul(s, y11))
      s = v128.load32_splat(x2)
      g0 = f32x4.add(g0, f32x4.mul(s, y20))
      g1 = f32x4.add(g1, f32x4.mul(s, y21))
      s = v128.load32_splat(x2 + xStride)
      g0 = f32x4.add(g0, f32x4.mul(s, y30))
      g1 = f32x4.add(g1, f32x4.mul(s, y31))
      v128.store(row, f32x4.add(v128.load(row), g0))
      v128.store(row, f32x4.add(v128.load(row, 16), g1), 16)
      row += width
    }
  }
}

function addOuterOneRow(x: usize, inputs: i32, y: usize, width: usize, g: usize, bias: usize): void {
  const xEnd = x + (<usize>inputs << 2)
  for (let column: usize = 0; column < width; column += 32) {
    const y0 = v128.load(y + column), y1 = v128.load(y + column, 16)
    if (bias) {
      const at = bias + column
      v128.store(at, f32x4.add(v128.load(at), y0))
      v128.store(at, f32x4.add(v128.load(at, 16), y1), 16)
    }
    let row = g + column
    for (let x0 = x; x0 < xEnd; x0 += 4) {
      const s = v128.load32_splat(x0)
      v128.store(row, f32x4.add(v128.load(row), f32x4.mul(s, y0)))
      v128.store(row, f32x4.add(v128.load(row, 16), f32x4.mul(s, y1)), 16)
      row += width
    }
  }
}

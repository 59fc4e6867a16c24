// The three matrix products everything else is made of. Matrices are row-major f32 whose rows are padded with zeros to a
// multiple of 8 values; strides are bytes. Every sum runs over its index in rising order whatever the blocking, with a
// rounding after each product and each addition, so an element is the same to the bit in a block of four rows and alone.

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

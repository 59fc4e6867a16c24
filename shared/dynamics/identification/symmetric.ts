/**
 * Eigenvalues and eigenvectors of a symmetric matrix.
 *
 * @param matrix   size × size, row-major; destroyed: its diagonal holds the eigenvalues afterwards
 * @param vectors  out, size × size, row-major: column k is the unit eigenvector of eigenvalue k
 * Source: cyclic Jacobi rotations (Golub & Van Loan, Matrix Computations, section 8.5).
 */
export function symmetricEigen(matrix: Float64Array, size: number, vectors: Float64Array): void {
  vectors.fill(0)
  for (let k = 0; k < size; k++) vectors[k * size + k] = 1
  for (let sweep = 0; sweep < 50; sweep++) {
    let off = 0
    let total = 0
    for (let r = 0; r < size; r++) {
      total += matrix[r * size + r] * matrix[r * size + r]
      for (let c = 0; c < r; c++) off += matrix[r * size + c] * matrix[r * size + c]
    }
    if (off <= 1e-30 * total) return
    for (let p = 0; p < size - 1; p++) for (let q = p + 1; q < size; q++) rotate(matrix, size, vectors, p, q)
  }
}

/** One rotation in the plane of p and q that makes their entry zero. */
function rotate(m: Float64Array, size: number, vectors: Float64Array, p: number, q: number): void {
  const off = m[p * size + q]
  if (off === 0) return
  const theta = (m[q * size + q] - m[p * size + p]) / (2 * off)
  const t = (theta < 0 ? -1 : 1) / (Math.abs(theta) + Math.sqrt(theta * theta + 1))
  const c = 1 / Math.sqrt(t * t + 1)
  const s = t * c
  for (let k = 0; k < size; k++) {
    const kp = m[k * size + p]
    const kq = m[k * size + q]
    m[k * size + p] = c * kp - s * kq
    m[k * size + q] = s * kp + c * kq
  }
  for (let k = 0; k < size; k++) {
    const pk = m[p * size + k]
    const qk = m[q * size + k]
    m[p * size + k] = c * pk - s * qk
    m[q * size + k] = s * pk + c * qk
    const vp = vectors[k * size + p]
    const vq = vectors[k * size + q]
    vectors[k * size + p] = c * vp - s * vq
    vectors[k * size + q] = s * vp + c * vq
  }
}

/**
 * The Cholesky factor of a symmetric positive definite matrix: A = L Lᵀ, in place in the lower triangle.
 *
 * @returns false where a pivot is not positive; the matrix is half done then
 */
export function factorise(a: Float64Array, size: number): boolean {
  for (let j = 0; j < size; j++) {
    let pivot = a[j * size + j]
    for (let k = 0; k < j; k++) pivot -= a[j * size + k] * a[j * size + k]
    if (!(pivot > 0)) return false
    const diagonal = Math.sqrt(pivot)
    a[j * size + j] = diagonal
    for (let i = j + 1; i < size; i++) {
      let sum = a[i * size + j]
      for (let k = 0; k < j; k++) sum -= a[i * size + k] * a[j * size + k]
      a[i * size + j] = sum / diagonal
    }
  }
  return true
}

/** Solves L Lᵀ x = b in place, L from {@link factorise}. */
export function solveFactorised(l: Float64Array, size: number, b: Float64Array): void {
  for (let i = 0; i < size; i++) {
    let sum = b[i]
    for (let k = 0; k < i; k++) sum -= l[i * size + k] * b[k]
    b[i] = sum / l[i * size + i]
  }
  for (let i = size - 1; i >= 0; i--) {
    let sum = b[i]
    for (let k = i + 1; k < size; k++) sum -= l[k * size + i] * b[k]
    b[i] = sum / l[i * size + i]
  }
}

/** The diagonal of (L Lᵀ)⁻¹. */
export function inverseDiagonal(l: Float64Array, size: number): Float64Array {
  const diagonal = new Float64Array(size)
  const column = new Float64Array(size)
  for (let c = 0; c < size; c++) {
    // Column c of L⁻¹; the diagonal of the inverse sums its squares.
    for (let i = c; i < size; i++) {
      let sum = i === c ? 1 : 0
      for (let k = c; k < i; k++) sum -= l[i * size + k] * column[k]
      column[i] = sum / l[i * size + i]
      diagonal[c] += column[i] * column[i]
    }
  }
  return diagonal
}

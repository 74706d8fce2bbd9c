/**
 * Cholesky factorisation of a symmetric positive definite matrix (Golub and Van Loan, Matrix Computations, §4.2),
 * row-major, p × p.
 */

/** Lower factor L with A = L Lᵀ (upper triangle zero), or null where A is not positive definite to working precision. */
export function cholesky(a: Float64Array, p: number): Float64Array | null {
  const l = new Float64Array(p * p);
  for (let i = 0; i < p; i++) {
    const rowI = i * p;
    for (let j = 0; j <= i; j++) {
      const rowJ = j * p;
      let sum = a[rowI + j];
      for (let k = 0; k < j; k++) sum -= l[rowI + k] * l[rowJ + k];
      if (i === j) {
        if (!(sum > 0) || !Number.isFinite(sum)) return null;
        l[rowI + i] = Math.sqrt(sum);
      } else {
        l[rowI + j] = sum / l[rowJ + j];
      }
    }
  }
  return l;
}

/** Solves L Lᵀ x = b. */
export function choleskySolve(l: Float64Array, p: number, b: Float64Array): Float64Array {
  const x = Float64Array.from(b);
  for (let i = 0; i < p; i++) {
    let sum = x[i];
    for (let k = 0; k < i; k++) sum -= l[i * p + k] * x[k];
    x[i] = sum / l[i * p + i];
  }
  for (let i = p - 1; i >= 0; i--) {
    const xi = x[i] / l[i * p + i];
    x[i] = xi;
    for (let k = 0; k < i; k++) x[k] -= l[i * p + k] * xi;
  }
  return x;
}

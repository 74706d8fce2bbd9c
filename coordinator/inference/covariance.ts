import { cholesky, choleskySolve } from '../../numerics/cholesky.js';

/** Inverse of a symmetric positive definite row-major p × p matrix; null where it is not positive definite. */
export function inverseOf(matrix: Float64Array, p: number): Float64Array | null {
  // in the scale of the diagonal, so that units of columns do not cost digits
  const root = Float64Array.from({ length: p }, (_, j) => Math.sqrt(matrix[j * p + j]));
  const factor = cholesky(
    matrix.map((value, at) => value / (root[Math.floor(at / p)] * root[at % p])),
    p,
  );
  if (factor === null) return null;
  const out = new Float64Array(p * p);
  for (let j = 0; j < p; j++) {
    const unit = new Float64Array(p);
    unit[j] = 1;
    const column = choleskySolve(factor, p, unit);
    for (let i = 0; i < p; i++) out[i * p + j] = column[i] / (root[i] * root[j]);
  }
  return symmetrised(out, p);
}

/** A B A for symmetric row-major p × p matrices. */
export function sandwiched(bread: Float64Array, meat: Float64Array, p: number): Float64Array {
  const half = product(bread, meat, p);
  return symmetrised(product(half, bread, p), p);
}

/** Σ_i s_i s_iᵀ, row-major, of vectors of length p. */
export function outerSum(vectors: readonly Float64Array[], p: number): Float64Array {
  const out = new Float64Array(p * p);
  for (const s of vectors)
    for (let i = 0; i < p; i++) for (let j = 0; j < p; j++) out[i * p + j] += s[i] * s[j];
  return out;
}

/** gᵀ C g. */
export function quadraticForm(covariance: Float64Array, g: Float64Array): number {
  const p = g.length;
  let sum = 0;
  for (let i = 0; i < p; i++) for (let j = 0; j < p; j++) sum += g[i] * covariance[i * p + j] * g[j];
  return sum;
}

function product(a: Float64Array, b: Float64Array, p: number): Float64Array {
  const out = new Float64Array(p * p);
  for (let i = 0; i < p; i++)
    for (let k = 0; k < p; k++) {
      const value = a[i * p + k];
      for (let j = 0; j < p; j++) out[i * p + j] += value * b[k * p + j];
    }
  return out;
}

function symmetrised(a: Float64Array, p: number): Float64Array {
  return a.map((value, at) => 0.5 * (value + a[(at % p) * p + Math.floor(at / p)]));
}

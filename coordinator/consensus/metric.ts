import { EigenvalueDecomposition, Matrix } from 'ml-matrix';
import { cholesky } from '../../numerics/cholesky.js';
import { maxOf } from '../../numerics/vector.js';

/** Share of the largest diagonal entry under which a diagonal metric is floored. */
const DIAGONAL_FLOOR = 1e-6;
/** Ridge, relative to the diagonal, that makes a measured curvature safely positive definite. */
export const RIDGE = 1e-9;
/** Pivots above this share of their diagonal need no ridge. */
const PIVOT_SOUND = 1e-6;
/** Smallest eigenvalue credited to a curvature that is not positive definite, in the scale of its diagonal. */
const EIGENVALUE_FLOOR = 0.01;

/** A curvature's diagonal, floored so that it can serve as a metric. */
export function flooredDiagonal(diagonal: Float64Array): Float64Array {
  const floor = DIAGONAL_FLOOR * maxOf(diagonal);
  return diagonal.map((value) => Math.max(value, floor > 0 ? floor : 1));
}

export function diagonalOf(matrix: Float64Array, p: number): Float64Array {
  return Float64Array.from({ length: p }, (_, j) => matrix[j * p + j]);
}

/** A copy of a row-major p × p matrix with t · diagonal added. */
export function plusDiagonal(matrix: Float64Array, t: number, diagonal: Float64Array): Float64Array {
  const p = diagonal.length;
  const out = Float64Array.from(matrix);
  for (let j = 0; j < p; j++) out[j * p + j] += t * diagonal[j];
  return out;
}

/**
 * A positive definite metric from a measured curvature H (row-major p × p): H itself where it is well conditioned,
 * H + ridge · diag where that factors, else the absolute eigenvalues of H in the scale of its diagonal, floored (a modified Newton matrix: Nocedal and Wright
 * 2006, §3.4).
 */
export function definiteMetric(
  curvature: Float64Array,
  diagonal: Float64Array,
  eigenvalueFloor = EIGENVALUE_FLOOR,
): Float64Array {
  const p = diagonal.length;
  const ridged = plusDiagonal(curvature, RIDGE, diagonal);
  const factor = cholesky(ridged, p);
  if (factor !== null) {
    const sound = diagonal.every((value, j) => factor[j * p + j] ** 2 > PIVOT_SOUND * value);
    return sound ? curvature : ridged;
  }
  const root = diagonal.map(Math.sqrt);
  const scaled = new Matrix(p, p);
  for (let i = 0; i < p; i++)
    for (let j = 0; j < p; j++) scaled.set(i, j, curvature[i * p + j] / (root[i] * root[j]));
  const { realEigenvalues, eigenvectorMatrix } = new EigenvalueDecomposition(scaled, {
    assumeSymmetric: true,
  });
  const out = new Float64Array(p * p);
  for (let k = 0; k < p; k++) {
    const size = Math.max(Math.abs(realEigenvalues[k]), eigenvalueFloor);
    for (let i = 0; i < p; i++) {
      const left = size * eigenvectorMatrix.get(i, k) * root[i];
      for (let j = 0; j < p; j++) out[i * p + j] += left * eigenvectorMatrix.get(j, k) * root[j];
    }
  }
  return out;
}

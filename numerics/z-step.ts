import { cholesky, choleskySolve } from './cholesky.js';
import { minimiseQuadratic } from './coordinate-descent.js';
import { isSmooth, type Penalty, proximalOperator } from './penalty.js';

/**
 * The consensus step (Z): z = argmin g(z) + ½ zᵀMz − bᵀz, where M = Σ M_i and b = Σ M_i s_i. The same small problem
 * serves proximal answers (s_i = z + u_i) and quadratic answers (M_i s_i = H_i z − ∇φ_i(z)).
 */

/** With a diagonal metric: p closed forms. */
export function zStepDiagonal(g: Penalty, metric: Float64Array, b: Float64Array): Float64Array {
  return b.map((value, j) => proximalOperator(g, j, metric[j], value));
}

/**
 * With a full metric (row-major p × p, positive definite): one Cholesky solve where g is smooth, else coordinate
 * descent with an active-set polish, from `start`. Null where M plus g's curvature is not positive definite.
 */
export function zStepFull(
  g: Penalty,
  metric: Float64Array,
  b: Float64Array,
  start: Float64Array,
): Float64Array | null {
  const p = b.length;
  if (!isSmooth(g)) return minimiseQuadratic(g, metric, b, start);
  const shifted = Float64Array.from(metric);
  for (let j = 0; j < p; j++) shifted[j * p + j] += g.l2[j];
  const factor = cholesky(shifted, p);
  return factor === null ? null : choleskySolve(factor, p, b);
}

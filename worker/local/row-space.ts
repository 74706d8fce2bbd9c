import type { CholeskyFactor } from '../../numerics/kernels/kernel.js';
import type { Shard } from '../design/shard.js';

/**
 * Fewer rows than half the columns: n × n systems are cheaper than p × p ones. They divide by the metric, which must hold
 * every column.
 */
export const inRowSpace = (shard: Shard, metric: Float64Array): boolean =>
  2 * shard.rowCount < shard.p && metric.every((held) => held > 0);

/** K = X M⁻¹ Xᵀ, n × n, M = diag(metric). */
export const rowKernel = (shard: Shard, metric: Float64Array): Float64Array =>
  shard.rows.crossProducts(metric.map((m) => 1 / m));

/**
 * Cholesky factor of I + S K S, S = diag(roots): the row-space form of XᵀS²X + M (Woodbury 1950; Golub and Van Loan,
 * §2.1.4). Null where it overflows.
 */
export function rowFactor(shard: Shard, kernel: Float64Array, roots: Float64Array): CholeskyFactor | null {
  const n = roots.length;
  const a = new Float64Array(n * n);
  for (let i = 0; i < n; i++) {
    for (let j = 0; j < n; j++) a[i * n + j] = roots[i] * kernel[i * n + j] * roots[j];
    a[i * n + i] += 1;
  }
  return shard.rows.kernel.factorise(a, n);
}

/** center + M⁻¹ pulled, with pulled = Xᵀα. */
export function pointFromRows(
  shard: Shard,
  metric: Float64Array,
  center: Float64Array,
  pulled: Float64Array,
): Float64Array {
  const point = new Float64Array(shard.p);
  for (let j = 0; j < point.length; j++) point[j] = center[j] + pulled[j] / metric[j];
  return point;
}

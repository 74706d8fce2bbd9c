import { cholesky } from '../../numerics/cholesky.js';
import { weightedGram } from '../../numerics/gram.js';
import { transposed } from '../../numerics/rows.js';
import type { Shard } from '../design/shard.js';

/**
 * Fewer rows than half the columns: n × n systems are cheaper than p × p ones. They divide by the metric, which must hold
 * every column.
 */
export const inRowSpace = (shard: Shard, metric: Float64Array): boolean =>
  2 * shard.rowCount < shard.p && metric.every((held) => held > 0);

/** K = X M⁻¹ Xᵀ, n × n, M = diag(metric). */
export function rowKernel(shard: Shard, metric: Float64Array): Float64Array {
  const inverse = metric.map((m) => 1 / m);
  return weightedGram(transposed(shard.x, shard.rowCount, shard.p), shard.p, shard.rowCount, inverse, 1);
}

/**
 * Cholesky factor of I + S K S, S = diag(roots): the row-space form of XᵀS²X + M (Woodbury 1950; Golub and Van Loan,
 * §2.1.4). Null where it overflows.
 */
export function rowFactor(kernel: Float64Array, roots: Float64Array): Float64Array | null {
  const n = roots.length;
  const a = new Float64Array(n * n);
  for (let i = 0; i < n; i++) {
    for (let j = 0; j < n; j++) a[i * n + j] = roots[i] * kernel[i * n + j] * roots[j];
    a[i * n + i] += 1;
  }
  return cholesky(a, n);
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

import type { CholeskyFactor } from '../../numerics/kernels/kernel.js';
import type { Shard } from '../design/shard.js';

/**
 * Most rows of the systems factored through the rows, most columns of those factored through the columns. Products with
 * rows by their entries cost so little that only small factors are quicker than solving by such products.
 */
const FULL_MOST = { rows: 1000, columns: 2000 } as const;
const SPARSE_MOST = { rows: 100, columns: 400 } as const;

/**
 * Fewer rows than half the columns: n × n systems are cheaper than p × p ones. They divide by the metric, which must hold
 * every column.
 */
export function inRowSpace({ rowCount, p, rows }: Shard, metric: Float64Array): boolean {
  const most = rows.sparse ? SPARSE_MOST : FULL_MOST;
  return 2 * rowCount < p && rowCount <= most.rows && metric.every((held) => held > 0);
}

/**
 * Whether systems are solved by a factor: products with the matrix must do where it is large, if the metric holds every
 * column but the intercept and so bounds its condition.
 */
export function isFactored(shard: Shard, metric: Float64Array): boolean {
  const most = shard.rows.sparse ? SPARSE_MOST : FULL_MOST;
  return (
    shard.p <= most.columns || inRowSpace(shard, metric) || metric.some((held, j) => j > 0 && !(held > 0))
  );
}

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

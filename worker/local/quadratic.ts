import type { CholeskyFactor } from '../../numerics/kernels/kernel.js';
import { allFinite } from '../../numerics/vector.js';
import { type Checked, succeed } from '../../protocol/failure.js';
import type { Shard } from '../design/shard.js';
import { notFinite, notPositiveDefinite } from './failures.js';
import { metricCache } from './metric-cache.js';
import { inRowSpace, pointFromRows, rowFactor, rowKernel } from './row-space.js';

/** Squared loss on one shard: φ(θ) = ½ θᵀGθ − cᵀθ + constant, G and c computed once. */
export interface Quadratic {
  /** G = XᵀWX / N, row-major p × p. */
  gram(): Float64Array;
  /** c = XᵀW(y − offset) / N. */
  linear(): Float64Array;
  /** argmin φ(x) + ½ (x − center)ᵀ diag(metric) (x − center). */
  proximalPoint(center: Float64Array, metric: Float64Array): Checked<Float64Array>;
}

export function quadratic(shard: Shard): Quadratic {
  let gramKept: Float64Array | null = null;
  let linearKept: Float64Array | null = null;
  const gram = (): Float64Array => {
    const { rows, weights, rowCountTotal } = shard;
    gramKept ??= rows.gram(weights, 1 / rowCountTotal);
    return gramKept;
  };
  const linear = (): Float64Array => {
    linearKept ??= linearPart(shard);
    return linearKept;
  };
  const rowSpace = rowSpaceSolve(shard);
  const dense = denseSolve(shard, gram, linear);
  const solve: Solve = (center, metric) => (inRowSpace(shard, metric) ? rowSpace : dense)(center, metric);
  const proximalPoint = (center: Float64Array, metric: Float64Array): Checked<Float64Array> => {
    const point = solve(center, metric);
    if (point === null) return notPositiveDefinite('Curvature of the squared loss plus metric');
    return allFinite(point) ? succeed(point) : notFinite('The proximal point');
  };
  return { gram, linear, proximalPoint };
}

type Solve = (center: Float64Array, metric: Float64Array) => Float64Array | null;

/** x = (G + M)⁻¹ (c + M center). */
function denseSolve(shard: Shard, gram: () => Float64Array, linear: () => Float64Array): Solve {
  const { p } = shard;
  const factors = metricCache<CholeskyFactor | null>(8 * p * p);
  return (center, metric) => {
    const factor = factors(metric, () => {
      const a = Float64Array.from(gram());
      for (let j = 0; j < p; j++) a[j * p + j] += metric[j];
      return shard.rows.kernel.factorise(a, p);
    });
    if (factor === null) return null;
    const right = Float64Array.from(linear());
    for (let j = 0; j < p; j++) right[j] += metric[j] * center[j];
    return factor.solve(right);
  };
}

/** x = center + M⁻¹XᵀS a with (I + SKS) a = S (y − offset − X center), S = √(W/N): nothing cancels. */
function rowSpaceSolve(shard: Shard): Solve {
  const { rowCount, p } = shard;
  // a number for every row, and most shards never come this way
  let kept: Float64Array | null = null;
  const factors = metricCache<CholeskyFactor | null>(8 * rowCount * rowCount);
  return (center, metric) => {
    kept ??= Float64Array.from({ length: rowCount }, (_, r) => Math.sqrt(weightOf(shard, r)));
    const roots = kept;
    const factor = factors(metric, () => rowFactor(shard, rowKernel(shard, metric), roots));
    if (factor === null) return null;
    const right = new Float64Array(rowCount);
    shard.rows.products(0, rowCount, center, right);
    for (let r = 0; r < rowCount; r++) right[r] = roots[r] * (targetOf(shard, r) - right[r]);
    const alpha = factor.solve(right);
    for (let r = 0; r < rowCount; r++) alpha[r] *= roots[r];
    const pulled = new Float64Array(p);
    shard.rows.addWeighted(0, rowCount, alpha, pulled);
    return pointFromRows(shard, metric, center, pulled);
  };
}

function linearPart(shard: Shard): Float64Array {
  const weighted = Float64Array.from(
    { length: shard.rowCount },
    (_, r) => weightOf(shard, r) * targetOf(shard, r),
  );
  const out = new Float64Array(shard.p);
  shard.rows.addWeighted(0, shard.rowCount, weighted, out);
  return out;
}

/** w/N of a row. */
export const weightOf = (shard: Shard, r: number): number =>
  (shard.weights === null ? 1 : shard.weights[r]) / shard.rowCountTotal;

/** y − offset of a row. */
export const targetOf = (shard: Shard, r: number): number =>
  shard.y[r] - (shard.offset === null ? 0 : shard.offset[r]);

import { addWeightedRows, rowProducts } from '../../numerics/rows.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';

/** Numbers of x that one block of a pass reads twice: it should still be in the cache the second time. */
const BLOCK_NUMBERS = 8192;

/** Per-row results of the last pass; one set serves every pass of a solver. */
export interface RowState {
  /** offset + x_r θ. */
  readonly eta: Float64Array;
  /** (w/N) · ∂loss/∂η. */
  readonly slopes: Float64Array;
}

export const rowState = (rowCount: number): RowState => ({
  eta: new Float64Array(rowCount),
  slopes: new Float64Array(rowCount),
});

/** φ(θ), and (1/N) Σ |w · loss|: the size of the terms that rounding errors of φ are measured against. */
export interface PassValue {
  readonly value: number;
  readonly magnitude: number;
}

/**
 * One pass over the rows at θ: φ(θ), the rows' predictors and, with `gradient` given (it is overwritten), the slopes and
 * ∇φ(θ) = Σ slope_r x_r. Partial sums per block keep the rounding error of φ far below n ulp.
 */
export function rowPass(
  shard: Shard,
  loss: Loss,
  theta: Float64Array,
  state: RowState,
  gradient: Float64Array | null,
): PassValue {
  const { rowCount, p, x } = shard;
  const step = Math.max(4, 4 * Math.floor(BLOCK_NUMBERS / (4 * Math.max(p, 1))));
  gradient?.fill(0);
  let value = 0;
  let magnitude = 0;
  for (let from = 0; from < rowCount; from += step) {
    const to = Math.min(from + step, rowCount);
    const eta = state.eta.subarray(from, to);
    rowProducts(x, p, from, to, theta, eta);
    const block = blockLoss(shard, loss, eta, from, to);
    value += block.value;
    magnitude += block.magnitude;
    if (gradient === null) continue;
    const slopes = state.slopes.subarray(from, to);
    blockSlopes(shard, loss, eta, slopes, from);
    addWeightedRows(x, p, from, to, slopes, gradient);
  }
  return { value: value / shard.rowCountTotal, magnitude: magnitude / shard.rowCountTotal };
}

/** Adds the offset to the block's predictors and sums its losses. */
function blockLoss(shard: Shard, loss: Loss, eta: Float64Array, from: number, to: number): PassValue {
  const { y, weights, offset } = shard;
  let value = 0;
  let magnitude = 0;
  for (let r = from; r < to; r++) {
    if (offset !== null) eta[r - from] += offset[r];
    const term = (weights === null ? 1 : weights[r]) * loss.value(y[r], eta[r - from]);
    value += term;
    magnitude += Math.abs(term);
  }
  return { value, magnitude };
}

function blockSlopes(shard: Shard, loss: Loss, eta: Float64Array, slopes: Float64Array, from: number): void {
  const { y, weights, rowCountTotal } = shard;
  for (let i = 0; i < eta.length; i++) {
    const weight = (weights === null ? 1 : weights[from + i]) / rowCountTotal;
    slopes[i] = weight * loss.slope(y[from + i], eta[i]);
  }
}

/** (w/N) · ∂²loss/∂η² of every row at the predictors given. */
export function rowCurvatures(shard: Shard, loss: Loss, eta: Float64Array): Float64Array {
  const { y, weights, rowCountTotal } = shard;
  const out = new Float64Array(shard.rowCount);
  for (let r = 0; r < out.length; r++) {
    const weight = (weights === null ? 1 : weights[r]) / rowCountTotal;
    out[r] = weight * loss.curvature(y[r], eta[r]);
  }
  return out;
}

import type { PassValue, RowState } from '../../numerics/kernels/kernel.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';

/** One set of per-row results serves every pass of a solver. */
export const rowState = (rowCount: number): RowState => ({
  eta: new Float64Array(rowCount),
  slopes: new Float64Array(rowCount),
});

/**
 * One pass over the rows at θ: φ(θ), the rows' predictors and, with `gradient` given (it is overwritten), the slopes and
 * ∇φ(θ) = Σ slope_r x_r.
 */
export function rowPass(
  shard: Shard,
  loss: Loss,
  theta: Float64Array,
  state: RowState,
  gradient: Float64Array | null,
): PassValue {
  return shard.rows.passes(shard, loss, [{ theta, state, gradient }])[0];
}

/** (w/N) · ∂²loss/∂η² of every row at the predictors given. */
export const rowCurvatures = (shard: Shard, loss: Loss, eta: Float64Array): Float64Array =>
  shard.rows.kernel.curvatures(shard, loss, eta);

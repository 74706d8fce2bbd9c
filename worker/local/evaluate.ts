import { weightedGram } from '../../numerics/gram.js';
import { packSymmetric } from '../../numerics/packed.js';
import { addWeightedSquares } from '../../numerics/rows.js';
import { allFinite } from '../../numerics/vector.js';
import { type Checked, succeed } from '../../protocol/failure.js';
import type { Want } from '../../protocol/messages/evaluate.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';
import { notFinite } from './failures.js';
import type { Quadratic } from './quadratic.js';
import { rowCurvatures, rowPass, rowState } from './row-pass.js';

export interface Evaluation {
  readonly value: number;
  readonly gradient: Float64Array | null;
  readonly diagonal: Float64Array | null;
  readonly curvature: Float64Array | null;
}

/** A value beyond this is reported as this: the wire carries finite numbers only, and any comparison refuses it. */
const VALUE_MOST = 1e300;

/** See `LocalSolver.evaluate`; `squares` of a squared loss, whose matrix is kept. */
export function evaluate(
  shard: Shard,
  loss: Loss,
  squares: Quadratic | null,
  point: Float64Array,
  want: Want,
): Checked<Evaluation> {
  const { p, rowCount, x } = shard;
  const rows = rowState(rowCount);
  const gradient = want === 'value' ? null : new Float64Array(p);
  const pass = rowPass(shard, loss, point, rows, gradient);
  if (Number.isNaN(pass.value) || pass.value === Number.NEGATIVE_INFINITY) return notFinite('The loss');
  const value = Math.min(pass.value, VALUE_MOST);
  if (gradient !== null && !allFinite(gradient)) return notFinite('The gradient');
  let diagonal: Float64Array | null = null;
  let curvature: Float64Array | null = null;
  if (want === 'diagonal' || want === 'curvature') {
    const weights = rowCurvatures(shard, loss, rows.eta);
    diagonal = new Float64Array(p);
    addWeightedSquares(x, p, 0, rowCount, weights, diagonal);
    if (want === 'curvature') {
      curvature = packSymmetric(squares?.gram() ?? weightedGram(x, rowCount, p, weights, 1), p);
    }
    if (!allFinite(diagonal) || (curvature !== null && !allFinite(curvature)))
      return notFinite('The curvature');
  }
  return succeed({ value, gradient, diagonal, curvature });
}

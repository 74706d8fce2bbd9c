import { packSymmetric } from '../../numerics/packed.js';
import { allFinite } from '../../numerics/vector.js';
import { type Checked, succeed } from '../../protocol/failure.js';
import type { Want } from '../../protocol/messages/evaluate.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';
import { notFinite } from './failures.js';
import type { Quadratic } from './quadratic.js';
import { rowCurvatures, rowState } from './row-pass.js';

export interface Evaluation {
  readonly value: number;
  readonly gradient: Float64Array | null;
  readonly diagonal: Float64Array | null;
  readonly curvature: Float64Array | null;
}

/** A value beyond this is reported as this: the wire carries finite numbers only, and any comparison refuses it. */
const VALUE_MOST = 1e300;

/** A point and what is wanted there. */
export interface AskedPoint {
  readonly point: Float64Array;
  readonly want: Want;
}

/** See `LocalSolver.evaluate`; `squares` of a squared loss, whose matrix is kept. */
export function evaluate(
  shard: Shard,
  loss: Loss,
  squares: Quadratic | null,
  point: Float64Array,
  want: Want,
): Checked<Evaluation> {
  const [at] = passesAt(shard, loss, [{ point, want }]);
  return evaluationAt(shard, loss, squares, at);
}

/** The same at several points, with one read of the rows for all values and gradients; yields before each matrix. */
export function* evaluateSteps(
  shard: Shard,
  loss: Loss,
  squares: Quadratic | null,
  asked: readonly AskedPoint[],
): Generator<void, Checked<Evaluation[]>> {
  const evaluations: Evaluation[] = [];
  for (const at of passesAt(shard, loss, asked)) {
    if (at.want === 'curvature') yield;
    const evaluated = evaluationAt(shard, loss, squares, at);
    if (!evaluated.ok) return evaluated;
    evaluations.push(evaluated.value);
  }
  return succeed(evaluations);
}

interface Passed {
  readonly want: Want;
  readonly value: number;
  readonly gradient: Float64Array | null;
  /** Predictors of the rows, where curvature is wanted. */
  readonly eta: Float64Array | null;
}

function passesAt(shard: Shard, loss: Loss, asked: readonly AskedPoint[]): Passed[] {
  const points = asked.map(({ point, want }) => ({
    theta: point,
    state: want === 'diagonal' || want === 'curvature' ? rowState(shard.rowCount) : null,
    gradient: want === 'value' ? null : new Float64Array(shard.p),
  }));
  const passed = shard.rows.passes(shard, loss, points);
  return points.map(({ state, gradient }, k) => {
    return { want: asked[k].want, value: passed[k].value, gradient, eta: state?.eta ?? null };
  });
}

function evaluationAt(shard: Shard, loss: Loss, squares: Quadratic | null, at: Passed): Checked<Evaluation> {
  const { p, rowCount, rows } = shard;
  const { want, gradient } = at;
  if (Number.isNaN(at.value) || at.value === Number.NEGATIVE_INFINITY) return notFinite('The loss');
  const value = Math.min(at.value, VALUE_MOST);
  if (gradient !== null && !allFinite(gradient)) return notFinite('The gradient');
  let diagonal: Float64Array | null = null;
  let curvature: Float64Array | null = null;
  if (at.eta !== null) {
    const weights = rowCurvatures(shard, loss, at.eta);
    diagonal = new Float64Array(p);
    rows.addWeightedSquares(0, rowCount, weights, diagonal);
    if (want === 'curvature') curvature = packSymmetric(squares?.gram() ?? rows.gram(weights, 1), p);
    if (!allFinite(diagonal) || (curvature !== null && !allFinite(curvature)))
      return notFinite('The curvature');
  }
  return succeed({ value, gradient, diagonal, curvature });
}

import { packSymmetric } from '../../numerics/packed.js';
import { FACTOR_BLOCK_ROWS } from '../../numerics/triangular-factor.js';
import { allFinite, maxOf } from '../../numerics/vector.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { Want } from '../../protocol/messages/evaluate.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';
import { type AskedPoint, type Evaluation, evaluate, evaluateSteps } from './evaluate.js';
import { notFinite, notPositiveDefinite } from './failures.js';
import { type JointEnd, jointSteps, type Others } from './joint.js';
import { type NewtonEnd, type NewtonLimits, newtonProximal } from './newton.js';
import { type Quadratic, quadratic, targetOf, weightOf } from './quadratic.js';
import { rowCurvatures, rowPass, rowState } from './row-pass.js';
import { isFactored } from './row-space.js';

/**
 * What a worker computes on its rows. p is the number of solver columns; every vector has p numbers unless stated. The
 * answers depend on the arguments alone: the same bits whatever was asked before.
 */
export interface LocalSolver {
  /**
   * x = argmin φ(x) + ½ (x − center)ᵀ M (x − center), M = scale · diag(diagonal), positive. Smooth losses begin at
   * `start`, as does a squared loss of many columns; others are solved in one step. Fails with `not-positive-definite`, `number-not-finite`, `stalled`.
   */
  proximal(
    center: Float64Array,
    scale: number,
    diagonal: Float64Array,
    start: Float64Array,
  ): Checked<{ point: Float64Array; newtonSteps: number }>;
  /** φ and, as far as wanted, ∇φ, diag ∇²φ and ∇²φ (packed lower triangle) at the point. */
  evaluate(point: Float64Array, want: Want): Checked<Evaluation>;
  /** The same at several points, which share one read of the rows; yields before each matrix. */
  evaluateSteps(asked: readonly AskedPoint[]): Generator<void, Checked<Evaluation[]>>;
  /**
   * The quadratic at this shard's own fit x = argmin φ(x) + ½ · hold · ‖x − point‖²_D, D the floored diagonal curvature
   * at the point: packed ∇²φ(x), and ∇²φ(x) x − ∇φ(x). x is near enough to the minimiser after at most 20 steps; the
   * quadratic is exact at x wherever that is.
   */
  ownFit(point: Float64Array, hold: number): Checked<{ curvature: Float64Array; linear: Float64Array }>;
  /** ∇²φ(point) S for `columns` directions S, p numbers each, one after the other: Xᵀ(w ∘ XS) / N. */
  sketch(point: Float64Array, directions: Float64Array, columns: number): Checked<Float64Array>;
  /**
   * x = argmin φ(x) + ½ xᵀBx − cᵀx + Σ_j l1_j |x_j| + ½ l2_j x_j², `others` B and c, with the quadratics of φ at `start`
   * and at x. A squared loss takes one step. Fails with `not-positive-definite`, `number-not-finite`.
   */
  joint(start: Float64Array, others: Others, l1: Float64Array, l2: Float64Array): Checked<JointEnd>;
  /** The same, one step at a time. */
  jointSteps(
    start: Float64Array,
    others: Others,
    l1: Float64Array,
    l2: Float64Array,
  ): Generator<void, Checked<JointEnd>>;
  /** Packed triangular factor of √(w/N) · [X, y − offset], p + 1 columns (mathematics.md §2, rung `pooled`). */
  factor(): Checked<Float64Array>;
}

export const PROXIMAL_LIMITS: NewtonLimits = { stepsMost: 200, accuracy: 1e-13 };
export const OWN_FIT_LIMITS: NewtonLimits = { stepsMost: 20, accuracy: 1e-8 };
/** Rows that all directions of a sketch pass over before the next: they stay in the cache. */
const SKETCH_BLOCK_ROWS = 64;
/** Floor of the own-fit metric: share of the largest diagonal curvature, and share of the shard's weight in the rows. */
export const OWN_FIT_FLOOR = 1e-3;

export function localSolver(shard: Shard, loss: Loss): LocalSolver {
  const squares: Quadratic | null = loss.quadratic ? quadratic(shard) : null;
  const steps: LocalSolver['jointSteps'] = (start, others, l1, l2) =>
    jointSteps({ shard, loss, squares, start, others, l1, l2 });
  return {
    proximal: (center, scale, diagonal, start) => {
      const metric = diagonal.map((d) => scale * d);
      for (let j = 0; j < metric.length; j++) {
        if (!(metric[j] > 0)) return notPositiveDefinite(`The metric (entry ${j} is ${metric[j]})`);
      }
      if (squares !== null && isFactored(shard, metric)) {
        const point = squares.proximalPoint(center, metric);
        return point.ok ? succeed({ point: point.value, newtonSteps: 1 }) : point;
      }
      return finished(newtonProximal({ shard, loss, center, metric, start }, PROXIMAL_LIMITS));
    },
    evaluate: (point, want) => evaluate(shard, loss, squares, point, want),
    evaluateSteps: (asked) => evaluateSteps(shard, loss, squares, asked),
    ownFit: (point, hold) =>
      squares === null ? ownFit(shard, loss, point, hold) : quadraticOwnFit(shard, squares),
    sketch: (point, directions, columns) => sketch(shard, loss, point, directions, columns),
    joint: (...problem) => lastOf(steps(...problem)),
    jointSteps: steps,
    factor: () => factor(shard),
  };
}

export function lastOf<T>(steps: Generator<void, T>): T {
  let turn = steps.next();
  while (!turn.done) turn = steps.next();
  return turn.value;
}

export function finished(end: Checked<NewtonEnd>): Checked<{ point: Float64Array; newtonSteps: number }> {
  if (!end.ok) return end;
  const { point, newtonSteps, converged } = end.value;
  if (!converged) {
    return fail('stalled', `Newton's method has not converged in ${newtonSteps} steps on this shard.`, {
      remedy: 'Look for columns on very different scales or extreme values, or raise the metric.',
    });
  }
  return allFinite(point) ? succeed({ point, newtonSteps }) : notFinite('The proximal point');
}

function ownFit(
  shard: Shard,
  loss: Loss,
  point: Float64Array,
  hold: number,
): Checked<{ curvature: Float64Array; linear: Float64Array }> {
  const { p, rowCount } = shard;
  if (rowCount === 0)
    return succeed({ curvature: new Float64Array((p * (p + 1)) / 2), linear: new Float64Array(p) });
  const there = evaluate(shard, loss, null, point, 'diagonal');
  if (!there.ok) return there;
  const diagonal = there.value.diagonal ?? new Float64Array(p);
  const floor = Math.max(OWN_FIT_FLOOR * maxOf(diagonal), (OWN_FIT_FLOOR * rowCount) / shard.rowCountTotal);
  const metric = diagonal.map((d) => hold * Math.max(d, floor));
  const fit = newtonProximal({ shard, loss, center: point, metric, start: point }, OWN_FIT_LIMITS);
  if (!fit.ok) return fit;
  const rows = rowState(rowCount);
  const linear = new Float64Array(p);
  rowPass(shard, loss, fit.value.point, rows, linear);
  const full = shard.rows.gram(rowCurvatures(shard, loss, rows.eta), 1);
  for (let j = 0; j < p; j++) {
    let sum = 0;
    for (let k = 0; k < p; k++) sum += full[j * p + k] * fit.value.point[k];
    linear[j] = sum - linear[j];
  }
  const curvature = packSymmetric(full, p);
  return allFinite(curvature) && allFinite(linear)
    ? succeed({ curvature, linear })
    : notFinite('The quadratic at the own fit');
}

export function sketch(
  shard: Shard,
  loss: Loss,
  point: Float64Array,
  directions: Float64Array,
  columns: number,
): Checked<Float64Array> {
  const { p, rowCount } = shard;
  const products = new Float64Array(columns * p);
  const rows = rowState(rowCount);
  rowPass(shard, loss, point, rows, null);
  const weights = rowCurvatures(shard, loss, rows.eta);
  // a sum over rows by their entries costs p numbers, however few the rows
  const step = shard.rows.sparse ? Math.max(1, rowCount) : SKETCH_BLOCK_ROWS;
  for (let from = 0; from < rowCount; from += step) {
    const to = Math.min(from + step, rowCount);
    const along = new Float64Array(to - from);
    for (let k = 0; k < columns; k++) {
      shard.rows.products(from, to, directions.subarray(k * p, (k + 1) * p), along);
      for (let r = from; r < to; r++) along[r - from] *= weights[r];
      shard.rows.addWeighted(from, to, along, products.subarray(k * p, (k + 1) * p));
    }
  }
  return allFinite(products) ? succeed(products) : notFinite('The sketch of the curvature');
}

/** The squared loss is its own quadratic at every point: no fit is needed. */
function quadraticOwnFit(
  shard: Shard,
  squares: Quadratic,
): Checked<{ curvature: Float64Array; linear: Float64Array }> {
  const curvature = packSymmetric(squares.gram(), shard.p);
  const linear = Float64Array.from(squares.linear());
  return allFinite(curvature) && allFinite(linear)
    ? succeed({ curvature, linear })
    : notFinite('The curvature');
}

export function factor(shard: Shard): Checked<Float64Array> {
  const { p, rowCount } = shard;
  const columns = p + 1;
  const accumulator = shard.rows.kernel.factorAccumulator(columns);
  const block = new Float64Array(FACTOR_BLOCK_ROWS * columns);
  const x = new Float64Array(FACTOR_BLOCK_ROWS * p);
  for (let from = 0; from < rowCount; from += FACTOR_BLOCK_ROWS) {
    const to = Math.min(from + FACTOR_BLOCK_ROWS, rowCount);
    shard.rows.copy(from, to, x);
    for (let r = from; r < to; r++) {
      const root = Math.sqrt(weightOf(shard, r));
      const row = (r - from) * columns;
      for (let j = 0; j < p; j++) block[row + j] = root * x[(r - from) * p + j];
      block[row + p] = root * targetOf(shard, r);
    }
    accumulator.append(block, to - from);
  }
  const packed = accumulator.packed();
  return allFinite(packed) ? succeed(packed) : notFinite('The triangular factor');
}

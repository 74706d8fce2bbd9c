import { packSymmetric } from '../../numerics/packed.js';
import { maxOf } from '../../numerics/vector.js';
import { type Checked, succeed } from '../../protocol/failure.js';
import type { Want } from '../../protocol/messages/evaluate.js';
import { denseShard } from '../design/dense-rows.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';
import { type AskedPoint, type Evaluation, evaluate, evaluateSteps } from './evaluate.js';
import { notPositiveDefinite } from './failures.js';
import { aboutMeans, atBestIntercept, curvatureMeans, isInformative } from './intercept.js';
import { type JointEnd, type JointQuadratic, jointSteps, type Others } from './joint.js';
import {
  factor,
  finished,
  type LocalSolver,
  lastOf,
  localSolver,
  OWN_FIT_FLOOR,
  OWN_FIT_LIMITS,
  PROXIMAL_LIMITS,
  sketch,
} from './local-solver.js';
import { newtonProximal } from './newton.js';
import { type Quadratic, quadratic } from './quadratic.js';
import { rowPass, rowState } from './row-pass.js';
import { isFactored } from './row-space.js';

/**
 * A local solver whose φ is the least over an intercept of the site's own (the profile of φ): the gradient is that of
 * the rows at the best intercept (envelope theorem), the curvature its Schur complement. `full` has the intercept's ones
 * as its first column; every vector here has one number less. Rows that bear nothing on the others, because the loss
 * falls for ever along the intercept, count as none.
 */
export function ownInterceptSolver(full: Shard, loss: Loss): LocalSolver {
  if (!isInformative(full, loss)) return localSolver(withoutRows(full), loss);
  const solver = new ProfileSolver(full, loss);
  return {
    proximal: (center, scale, diagonal, start) => solver.proximal(center, scale, diagonal, start),
    evaluate: (point, want) => solver.evaluate(point, want),
    evaluateSteps: (asked) => solver.evaluateSteps(asked),
    ownFit: (point, hold) => solver.ownFit(point, hold),
    sketch: (point, directions, columns) => solver.sketch(point, directions, columns),
    joint: (...problem) => lastOf(solver.jointSteps(...problem)),
    jointSteps: (...problem) => solver.jointSteps(...problem),
    factor: () => solver.factor(),
  };
}

/** What rows held out lose at the intercept that is best for the training rows: only values are defined there. */
export function heldOutValue(
  training: Shard,
  heldOut: Shard,
  loss: Loss,
  theta: Float64Array,
): Checked<Evaluation> {
  // without training rows that say what the intercept is, nothing can be said of those held out
  if (!isInformative(training, loss)) return succeed(NOTHING);
  return evaluate(heldOut, loss, null, atBestIntercept(training, loss, theta), 'value');
}

const NOTHING: Evaluation = { value: 0, gradient: null, diagonal: null, curvature: null };

const withoutRows = ({ p, rowCountTotal, rows: { kernel } }: Shard): Shard =>
  denseShard({
    rowCount: 0,
    p: p - 1,
    x: new Float64Array(0),
    y: new Float64Array(0),
    weights: null,
    offset: null,
    rowCountTotal,
    kernel,
  });

const afterZero = (values: Float64Array): Float64Array => {
  const out = new Float64Array(values.length + 1);
  out.set(values, 1);
  return out;
};

class ProfileSolver {
  private readonly squares: Quadratic | null;

  constructor(
    private readonly full: Shard,
    private readonly loss: Loss,
  ) {
    this.squares = loss.quadratic ? quadratic(full) : null;
  }

  /** The intercept is not held: its metric is zero. */
  proximal(
    center: Float64Array,
    scale: number,
    diagonal: Float64Array,
    start: Float64Array,
  ): Checked<{ point: Float64Array; newtonSteps: number }> {
    const { full: shard, loss, squares } = this;
    for (let j = 0; j < diagonal.length; j++) {
      const held = scale * diagonal[j];
      if (!(held > 0)) return notPositiveDefinite(`The metric (entry ${j} is ${held})`);
    }
    const metric = afterZero(diagonal.map((d) => scale * d));
    if (squares !== null && isFactored(shard, metric)) {
      const point = squares.proximalPoint(afterZero(center), metric);
      return point.ok ? succeed({ point: point.value.slice(1), newtonSteps: 1 }) : point;
    }
    const from = atBestIntercept(shard, loss, start);
    const end = finished(
      newtonProximal({ shard, loss, center: afterZero(center), metric, start: from }, PROXIMAL_LIMITS),
    );
    if (!end.ok) return end;
    const { point, newtonSteps } = end.value;
    return succeed({ point: point.slice(1), newtonSteps });
  }

  evaluate(theta: Float64Array, want: Want): Checked<Evaluation> {
    const { full, loss, squares } = this;
    const point = atBestIntercept(full, loss, theta);
    const at = evaluate(full, loss, squares, point, want);
    return at.ok ? succeed(this.profiled(point, at.value)) : at;
  }

  *evaluateSteps(asked: readonly AskedPoint[]): Generator<void, Checked<Evaluation[]>> {
    const { full, loss, squares } = this;
    const whole = asked.map(({ point, want }) => ({ point: atBestIntercept(full, loss, point), want }));
    const at = yield* evaluateSteps(full, loss, squares, whole);
    if (!at.ok) return at;
    return succeed(at.value.map((evaluation, k) => this.profiled(whole[k].point, evaluation)));
  }

  /** An evaluation by all columns as one by θ, the intercept moving along. */
  private profiled(point: Float64Array, at: Evaluation): Evaluation {
    const { value, gradient, diagonal, curvature } = at;
    const means = diagonal === null ? null : this.meansAt(point);
    return {
      value,
      gradient: gradient?.slice(1) ?? null,
      diagonal: diagonal === null || means === null ? null : diagonalAbout(diagonal, means),
      curvature: curvature === null || means === null ? null : aboutMeans(curvature, means),
    };
  }

  private meansAt(point: Float64Array): Float64Array {
    const rows = rowState(this.full.rowCount);
    rowPass(this.full, this.loss, point, rows, null);
    return curvatureMeans(this.full, this.loss, rows.eta);
  }

  ownFit(theta: Float64Array, hold: number): Checked<{ curvature: Float64Array; linear: Float64Array }> {
    const { full: shard, squares } = this;
    const fit = squares === null ? this.heldFit(theta, hold) : succeed(theta);
    if (!fit.ok) return fit;
    const at = this.quadraticAt(fit.value);
    if (!at.ok) return at;
    const { gradient, curvature } = at.value;
    const linear = packedTimes(curvature, fit.value);
    for (let j = 0; j < shard.p - 1; j++) linear[j] -= gradient[j];
    return succeed({ curvature, linear });
  }

  private heldFit(theta: Float64Array, hold: number): Checked<Float64Array> {
    const { full: shard, loss } = this;
    const there = this.evaluate(theta, 'diagonal');
    if (!there.ok) return there;
    const diagonal = there.value.diagonal ?? new Float64Array(theta.length);
    const share = shard.rowCount / shard.rowCountTotal;
    const floor = Math.max(OWN_FIT_FLOOR * maxOf(diagonal), OWN_FIT_FLOOR * share);
    const metric = afterZero(diagonal.map((d) => hold * Math.max(d, floor)));
    const start = atBestIntercept(shard, loss, theta);
    const end = newtonProximal({ shard, loss, center: start, metric, start }, OWN_FIT_LIMITS);
    return end.ok ? succeed(end.value.point.slice(1)) : end;
  }

  private quadraticAt(theta: Float64Array): Checked<JointQuadratic> {
    const at = this.evaluate(theta, 'curvature');
    if (!at.ok) return at;
    const { value, gradient, curvature } = at.value;
    if (gradient === null || curvature === null) throw new Error('wanted, but not evaluated');
    return succeed({ value, gradient, curvature });
  }

  sketch(theta: Float64Array, directions: Float64Array, columns: number): Checked<Float64Array> {
    const { full, loss } = this;
    const { p } = full;
    const point = atBestIntercept(full, loss, theta);
    const means = this.meansAt(point);
    // each direction with the step of the intercept that goes with it
    const moved = new Float64Array(columns * p);
    for (let k = 0; k < columns; k++) {
      const to = moved.subarray(k * p, (k + 1) * p);
      for (let j = 1; j < p; j++) {
        to[j] = directions[k * (p - 1) + j - 1];
        to[0] -= means[j] * to[j];
      }
    }
    const products = sketch(full, loss, point, moved, columns);
    if (!products.ok) return products;
    const out = new Float64Array(columns * (p - 1));
    for (let k = 0; k < columns; k++) out.set(products.value.subarray(k * p + 1, (k + 1) * p), k * (p - 1));
    return succeed(out);
  }

  *jointSteps(
    start: Float64Array,
    { curvature, linear }: Others,
    l1: Float64Array,
    l2: Float64Array,
  ): Generator<void, Checked<JointEnd>> {
    const { full: shard, loss, squares } = this;
    const reached = yield* jointSteps({
      shard,
      loss,
      squares,
      start: atBestIntercept(shard, loss, start),
      others: { curvature: bordered(curvature, shard.p), linear: afterZero(linear) },
      l1: afterZero(l1),
      l2: afterZero(l2),
    });
    if (!reached.ok) return reached;
    const point = reached.value.point.slice(1);
    yield;
    const first = this.quadraticAt(start);
    if (!first.ok) return first;
    yield;
    const last = this.quadraticAt(point);
    if (!last.ok) return last;
    const { newtonSteps } = reached.value;
    return succeed({ start: first.value, point, end: last.value, newtonSteps });
  }

  /** R of [ones, X, y] without its first row and column: R of what the ones leave of the others. */
  factor(): Checked<Float64Array> {
    const made = factor(this.full);
    if (!made.ok) return made;
    const order = this.full.p;
    const out = new Float64Array((order * (order + 1)) / 2);
    for (let j = 0, at = 0; j < order; j++) {
      const column = ((j + 1) * (j + 2)) / 2 + 1;
      for (let i = 0; i <= j; i++, at++) out[at] = made.value[column + i];
    }
    return succeed(out);
  }
}

/** Σ h (x_j − mean_j)² from Σ h x_j², ones first. */
function diagonalAbout(diagonal: Float64Array, means: Float64Array): Float64Array {
  const out = new Float64Array(diagonal.length - 1);
  for (let j = 0; j < out.length; j++)
    out[j] = Math.max(0, diagonal[j + 1] - means[j + 1] * means[j + 1] * diagonal[0]);
  return out;
}

/** A packed matrix of one column less, with zeros for the intercept before it. */
function bordered(packed: Float64Array, p: number): Float64Array {
  const full = new Float64Array(p * p);
  for (let i = 1, at = 0; i < p; i++) for (let j = 1; j <= i; j++, at++) full[i * p + j] = packed[at];
  return packSymmetric(full, p);
}

function packedTimes(packed: Float64Array, x: Float64Array): Float64Array {
  const out = new Float64Array(x.length);
  for (let i = 0, at = 0; i < x.length; i++) {
    for (let j = 0; j <= i; j++, at++) {
      out[i] += packed[at] * x[j];
      if (j < i) out[j] += packed[at] * x[i];
    }
  }
  return out;
}

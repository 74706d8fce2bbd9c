import type { Kernel, RowState } from '../../numerics/kernels/kernel.js';
import { unpackSymmetric } from '../../numerics/packed.js';
import { noPenalty, type Penalty, penaltyValue } from '../../numerics/penalty.js';
import { addScaled, allFinite, dot, maxAbs, plusScaled, subtract } from '../../numerics/vector.js';
import { zStepFull } from '../../numerics/z-step.js';
import { type Checked, succeed } from '../../protocol/failure.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';
import { evaluate } from './evaluate.js';
import { notFinite, notPositiveDefinite } from './failures.js';
import type { Quadratic } from './quadratic.js';
import { rowCurvatures, rowPass, rowState } from './row-pass.js';

/** The other sites: ½ xᵀBx − cᵀx, B packed. */
export interface Others {
  readonly curvature: Float64Array;
  readonly linear: Float64Array;
}

export interface JointProblem {
  readonly shard: Shard;
  readonly loss: Loss;
  /** Of a squared loss. */
  readonly squares: Quadratic | null;
  readonly start: Float64Array;
  readonly others: Others;
  readonly l1: Float64Array;
  readonly l2: Float64Array;
}

/** φ, ∇φ and packed ∇²φ at one point. */
export interface JointQuadratic {
  readonly value: number;
  readonly gradient: Float64Array;
  readonly curvature: Float64Array;
}

export interface JointEnd {
  readonly start: JointQuadratic;
  readonly point: Float64Array;
  readonly end: JointQuadratic;
  readonly newtonSteps: number;
}

const STEPS_MOST = 100;
/** The step whose predicted decrease, relative to the terms of the objective, is under this is the last one. */
const ACCURACY = 1e-14;
/** Predicted decreases under which differences of the objective are noise, and steps are taken whole. */
const NOISE = 1e-13;
/** Share of the point's size under which a step is rounding. */
const STEP_NOISE = 1e-13;
/** Sufficient decrease of Armijo (1966), and the rounding of an objective that no test can see below. */
const ARMIJO = 1e-4;
const ROUNDING = 1e-14;
const HALVINGS_MOST = 40;
/** Ridges, as shares of the largest diagonal entry, tried in turn. */
const RIDGES = [0, 1e-12, 1e-8, 1e-4] as const;

/** A point and what the next step needs. */
interface Iterate {
  readonly x: Float64Array;
  readonly objective: number;
  /** Size of the terms of the objective, for rounding. */
  readonly magnitude: number;
  /** ∇φ, and of the smooth part φ + ½ xᵀBx − cᵀx. */
  readonly own: Float64Array;
  readonly gradient: Float64Array;
}

/** Where it ends: the minimiser to rounding. */
interface End {
  readonly point: Float64Array;
}

/** The problem with B in full and the rows of the last pass. */
interface Workplace extends JointProblem {
  readonly full: Float64Array;
  readonly penalty: Penalty;
  readonly rows: RowState;
}

/**
 * Proximal Newton (Lee, Sun, Saunders 2014): each step goes to the minimiser of the second-order model of φ, the others
 * and the penalty, shortened until the objective falls enough (Tseng and Yun 2009). Yields before each step.
 */
export function* jointSteps(problem: JointProblem): Generator<void, Checked<JointEnd>> {
  const start = quadraticAt(problem, problem.start);
  if (!start.ok) return start;
  const reached = yield* descend(problem, start.value);
  if (!reached.ok) return reached;
  const { point, newtonSteps } = reached.value;
  yield;
  const end = quadraticAt(problem, point);
  if (!end.ok) return end;
  return succeed({ start: start.value, point, end: end.value, newtonSteps });
}

function* descend(
  problem: JointProblem,
  start: JointQuadratic,
): Generator<void, Checked<{ point: Float64Array; newtonSteps: number }>> {
  const { shard, others, l1, l2 } = problem;
  const place: Workplace = {
    ...problem,
    full: unpackSymmetric(others.curvature),
    penalty: { ...noPenalty(shard.p), l1, l2 },
    rows: rowState(shard.rowCount),
  };
  let iterate = iterateAt(place, problem.start);
  let curvature = unpackSymmetric(start.curvature);
  for (let steps = 1; steps <= STEPS_MOST; steps++) {
    yield;
    if (!Number.isFinite(iterate.objective)) return notFinite('The loss');
    if (steps > 1) curvature = curvatureAt(place);
    const next = takeStep(place, iterate, curvature);
    if (!next.ok) return next;
    if ('point' in next.value) return succeed({ point: next.value.point, newtonSteps: steps });
    iterate = next.value;
  }
  return succeed({ point: iterate.x, newtonSteps: STEPS_MOST });
}

/**
 * The next iterate, or the point where it ends. Where the model has no minimiser, or one so far off that no length of
 * the step serves, a ridge about the iterate: the steps get shorter, and still end at the minimiser of the problem.
 */
function takeStep(place: Workplace, from: Iterate, curvature: Float64Array): Checked<Iterate | End> {
  const model = modelAt(place, from, curvature);
  let definite = false;
  for (const share of RIDGES) {
    const point = minimiserOf(place.shard.rows.kernel, place.penalty, model, share * model.largest, from.x);
    if (point === null) continue;
    definite = true;
    const step = subtract(point, from.x);
    const decrease = predictedDecrease(place.penalty, from, step);
    if (!Number.isFinite(decrease)) return notFinite('The step');
    const exact = place.squares !== null && share === 0;
    const small = Math.abs(decrease) <= ACCURACY * from.magnitude;
    if (exact || small || maxAbs(step) <= STEP_NOISE * maxAbs(from.x)) return succeed({ point });
    const next = decrease > 0 ? search(place, from, step, decrease) : null;
    if (next !== null) return succeed(next);
  }
  // no lower point: the answer's quadratics are exact here all the same, and the coordinator sees what they promise
  return definite
    ? succeed({ point: from.x })
    : notPositiveDefinite('Curvature of the loss and of the other sites');
}

function quadraticAt({ shard, loss, squares }: JointProblem, x: Float64Array): Checked<JointQuadratic> {
  const at = evaluate(shard, loss, squares, x, 'curvature');
  if (!at.ok) return at;
  const { value, gradient, curvature } = at.value;
  if (gradient === null || curvature === null) throw new Error('wanted, but not evaluated');
  return succeed({ value, gradient, curvature });
}

/** ∇²φ in full at the point of the last pass. */
function curvatureAt({ shard, loss, squares, rows }: Workplace): Float64Array {
  return squares?.gram() ?? shard.rows.gram(rowCurvatures(shard, loss, rows.eta), 1);
}

/** ½ zᵀ(B + H)z − rightᵀz: the others and the second-order model of φ at x, without constants. */
interface Model {
  readonly matrix: Float64Array;
  readonly right: Float64Array;
  /** The largest diagonal entry of the matrix. */
  readonly largest: number;
}

function modelAt(
  { shard, full, others, squares }: Workplace,
  { x, own }: Iterate,
  curvature: Float64Array,
): Model {
  const p = x.length;
  const matrix = plusScaled(full, 1, curvature);
  const pull = squares === null ? subtract(times(shard, curvature, x), own) : squares.linear();
  let largest = 0;
  for (let j = 0; j < p; j++) largest = Math.max(largest, matrix[j * p + j]);
  return { matrix, right: plusScaled(pull, 1, others.linear), largest };
}

/** argmin of model, penalty and ½ · ridge · ‖z − x‖²; null where that is not convex or not found. */
function minimiserOf(
  kernel: Kernel,
  g: Penalty,
  { matrix, right }: Model,
  ridge: number,
  x: Float64Array,
): Float64Array | null {
  const p = x.length;
  const metric = withDiagonal(matrix, p, () => ridge);
  const held = withDiagonal(metric, p, (j) => g.l2[j]);
  if (kernel.factorise(held, p) === null) return null;
  const point = zStepFull(g, metric, plusScaled(right, ridge, x), x);
  return point !== null && allFinite(point) ? point : null;
}

function withDiagonal(matrix: Float64Array, p: number, more: (j: number) => number): Float64Array {
  const out = Float64Array.from(matrix);
  for (let j = 0; j < p; j++) out[j * p + j] += more(j);
  return out;
}

/** What the objective falls by along the whole step to first order: −∇f(x)ᵀd + g(x) − g(x + d), term by term. */
function predictedDecrease(g: Penalty, { x, gradient }: Iterate, step: Float64Array): number {
  let sum = 0;
  for (let j = 0; j < x.length; j++) {
    const to = x[j] + step[j];
    const bend = g.l1[j] * (Math.abs(x[j]) - Math.abs(to)) - 0.5 * g.l2[j] * step[j] * (x[j] + to);
    sum += bend - gradient[j] * step[j];
  }
  return sum;
}

/** Backtracking by halves; null where no step length lowers the objective. The rows are those of the point returned. */
function search(place: Workplace, from: Iterate, step: Float64Array, decrease: number): Iterate | null {
  const slack = ROUNDING * from.magnitude;
  const blind = decrease <= NOISE * from.magnitude;
  let length = 1;
  for (let halvings = 0; halvings < HALVINGS_MOST; halvings++, length /= 2) {
    const trial = iterateAt(place, plusScaled(from.x, length, step));
    if (blind || trial.objective <= from.objective - ARMIJO * length * decrease + slack) return trial;
  }
  return null;
}

function iterateAt(place: Workplace, x: Float64Array): Iterate {
  const { shard, loss, rows, full, others, penalty } = place;
  const own = new Float64Array(shard.p);
  const pass = rowPass(shard, loss, x, rows, own);
  const product = times(shard, full, x);
  const bowl = 0.5 * dot(x, product);
  const slope = dot(others.linear, x);
  const held = penaltyValue(penalty, x);
  const gradient = plusScaled(own, 1, product);
  addScaled(gradient, -1, others.linear);
  return {
    x,
    objective: pass.value + bowl - slope + held,
    magnitude: pass.magnitude + Math.abs(bowl) + Math.abs(slope) + held,
    own,
    gradient,
  };
}

/** A x, A symmetric, row-major. */
function times(shard: Shard, matrix: Float64Array, x: Float64Array): Float64Array {
  const out = new Float64Array(x.length);
  shard.rows.kernel.rowProducts(matrix, x.length, 0, x.length, x, out);
  return out;
}

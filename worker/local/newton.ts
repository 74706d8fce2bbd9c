import type { RowState } from '../../numerics/kernels/kernel.js';
import { dot, maxAbs, plusScaled, subtract } from '../../numerics/vector.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';
import { notFinite, notPositiveDefinite } from './failures.js';
import { withoutIdle } from './idle-columns.js';
import { type NewtonSystem, newtonSystem } from './newton-system.js';
import { rowCurvatures, rowPass, rowState } from './row-pass.js';

/** minimise φ(x) + ½ (x − center)ᵀ diag(metric) (x − center), beginning at `start`. */
export interface ProximalProblem {
  readonly shard: Shard;
  readonly loss: Loss;
  readonly center: Float64Array;
  readonly metric: Float64Array;
  readonly start: Float64Array;
}

export interface NewtonLimits {
  readonly stepsMost: number;
  /** The step whose decrement, relative to the objective, is under this is the last one. */
  readonly accuracy: number;
}

export interface NewtonEnd {
  readonly point: Float64Array;
  readonly newtonSteps: number;
  /** The step that ended there; where the limit came first, all the way from the start. */
  readonly lastStep: Float64Array;
  /** False where the step limit came first. */
  readonly converged: boolean;
}

/** Sufficient decrease of Armijo (1966), and the rounding of an objective that no test can see below. */
const ARMIJO = 1e-4;
const ROUNDING = 1e-14;
/** Decrements, relative to the objective, below which differences of the objective are noise and steps are taken whole. */
const NOISE = 1e-13;
/** Share of the point's size under which a step is rounding. */
const STEP_NOISE = 1e-13;
const HALVINGS_MOST = 40;
/**
 * Share of the first decrement that is near enough where steps have to be found by iteration: the nearer the start was,
 * the nearer the end is. An ask starts where the one before ended, so the accuracy follows the outer residual.
 */
const GAIN = 1e-5;

/** A point, its objective and what the next step needs. */
interface Iterate {
  readonly x: Float64Array;
  readonly objective: number;
  /** Size of the terms of the objective, for rounding. */
  readonly magnitude: number;
  readonly gradient: Float64Array;
}

interface Direction {
  readonly step: Float64Array;
  /** −gradientᵀ step: twice the decrease the model promises. */
  readonly decrement: number;
  /** True where the factor is that of an earlier step. */
  readonly kept: boolean;
}

/**
 * Damped Newton (Boyd and Vandenberghe, Convex Optimization, §9.5) with the factor kept from step to step while that is
 * cheaper than a new one: a kept factor contracts the decrement linearly, a new one quadratically. Columns that are idle
 * at this site are solved for aside.
 */
export function newtonProximal(problem: ProximalProblem, limits: NewtonLimits): Checked<NewtonEnd> {
  const own = withoutIdle(problem);
  if (own === null) return minimise(problem, limits);
  const end = minimise(own.problem, limits);
  if (!end.ok) return end;
  const { point, lastStep } = end.value;
  return succeed({ ...end.value, point: own.whole(point), lastStep: own.wholeStep(lastStep) });
}

function minimise(problem: ProximalProblem, limits: NewtonLimits): Checked<NewtonEnd> {
  const rows = rowState(problem.shard.rowCount);
  const system = newtonSystem(problem.shard, problem.metric, problem.center);
  let iterate = iterateAt(problem, problem.start, rows);
  // decrement of the last whole step: what a kept factor is judged by
  let before: number | null = null;
  let first: number | null = null;
  for (let steps = 0; steps < limits.stepsMost; steps++) {
    if (!Number.isFinite(iterate.objective)) return notFinite('The loss');
    const direction = nextDirection(problem, limits, system, iterate, rows, before);
    if (direction === null) return notPositiveDefinite('Curvature of the loss plus metric');
    const { step, decrement } = direction;
    if (!Number.isFinite(decrement)) return notFinite('The Newton step');
    first ??= decrement;
    const share = direction.kept ? accuracyKept(limits) : limits.accuracy;
    const target = Math.max(share * iterate.magnitude, system.factored ? 0 : GAIN * first);
    const last = Math.abs(decrement) <= target || (!direction.kept && isRounding(step, iterate.x));
    if (last) {
      const point = plusScaled(iterate.x, 1, step);
      return succeed({ point, newtonSteps: steps + 1, lastStep: step, converged: true });
    }
    const found = decrement > 0 ? search(problem, iterate, direction, rows) : null;
    if (found === null && !direction.kept) return stalled(steps);
    before = found?.whole ? decrement : null;
    // a kept factor that gave no descent: back to the point itself, where the next turn makes a new factor
    iterate = found?.iterate ?? iterateAt(problem, iterate.x, rows);
  }
  return succeed({
    point: iterate.x,
    newtonSteps: limits.stepsMost,
    lastStep: subtract(iterate.x, problem.start),
    converged: false,
  });
}

/**
 * A step in the last digits: rows fitted exactly leave an objective near zero, whose own size does not tell how far
 * rounding of the predictors reaches.
 */
const isRounding = (step: Float64Array, x: Float64Array): boolean => maxAbs(step) <= STEP_NOISE * maxAbs(x);

/** A kept factor gains little in its last step, so it must come closer first. */
const accuracyKept = (limits: NewtonLimits): number => 100 * limits.accuracy * limits.accuracy;

/** The step at the iterate, with the kept factor where that pays, else with a new one; null where none can be made. */
function nextDirection(
  problem: ProximalProblem,
  limits: NewtonLimits,
  system: NewtonSystem,
  iterate: Iterate,
  rows: RowState,
  before: number | null,
): Direction | null {
  if (before !== null && system.factored) {
    const kept = directionFrom(system, iterate, rows, true);
    const target = accuracyKept(limits) * iterate.magnitude;
    if (worthKeeping(system, kept.decrement, before, target)) return kept;
  }
  if (!system.refresh(rowCurvatures(problem.shard, problem.loss, rows.eta))) return null;
  return directionFrom(system, iterate, rows, false);
}

/** True where the steps that the kept factor still needs, at the contraction just seen, cost less than two new factors. */
function worthKeeping(system: NewtonSystem, decrement: number, before: number, target: number): boolean {
  if (!(decrement >= 0) || decrement >= before) return false;
  if (decrement <= target) return true;
  const stepsLeft = Math.log(target / decrement) / Math.log(decrement / before);
  return stepsLeft <= Math.max(2, system.passesPerRefresh / 2);
}

function directionFrom(system: NewtonSystem, iterate: Iterate, rows: RowState, kept: boolean): Direction {
  const { x, gradient, magnitude } = iterate;
  const step = system.step({ x, rows, gradient, magnitude });
  return { step, decrement: -dot(gradient, step), kept };
}

/** Backtracking by halves; null where no step length lowers the objective. `rows` are those of the point returned. */
function search(
  problem: ProximalProblem,
  from: Iterate,
  { step, decrement }: Direction,
  rows: RowState,
): { iterate: Iterate; whole: boolean } | null {
  const slack = ROUNDING * from.magnitude;
  const blind = decrement <= NOISE * from.magnitude;
  let length = 1;
  for (let halvings = 0; halvings < HALVINGS_MOST; halvings++, length /= 2) {
    const trial = iterateAt(problem, plusScaled(from.x, length, step), rows);
    if (blind || trial.objective <= from.objective - ARMIJO * length * decrement + slack) {
      return { iterate: trial, whole: length === 1 };
    }
  }
  return null;
}

function iterateAt(problem: ProximalProblem, x: Float64Array, rows: RowState): Iterate {
  const { shard, loss, center, metric } = problem;
  const gradient = new Float64Array(shard.p);
  const pass = rowPass(shard, loss, x, rows, gradient);
  let held = 0;
  for (let j = 0; j < gradient.length; j++) {
    const pull = metric[j] * (x[j] - center[j]);
    gradient[j] += pull;
    held += 0.5 * pull * (x[j] - center[j]);
  }
  return { x, objective: pass.value + held, magnitude: pass.magnitude + held, gradient };
}

const stalled = (steps: number) =>
  fail('stalled', `Newton's method found no lower point after ${steps} steps on this shard.`, {
    remedy: 'Look for columns on very different scales or extreme values, or raise the metric.',
  });

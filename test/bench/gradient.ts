import { flooredDiagonal } from '../../coordinator/consensus/metric.js';
import { seededRandom } from '../../numerics/random.js';
import { dot, norm, plusScaled, subtract, sumOf } from '../../numerics/vector.js';
import { zStepDiagonal } from '../../numerics/z-step.js';
import type { LocalSolver } from '../../worker/local/local-solver.js';
import { must } from '../support/method-driver.js';
import { type BaselineProblem, type BaselineRun, GapWatch } from './baseline.js';

/** Rounds spent on the largest eigenvalue of the scaled curvature at the start, and the length of their differences. */
const POWER_ROUNDS = 5;
const DIFFERENCE = 1e-4;
const BACKTRACKING = 2;
const ROUNDING = 1e-12;

/**
 * Accelerated proximal gradient on the pooled gradient (Beck and Teboulle 2009) in the scale of the pooled diagonal
 * curvature D at the start, with the gradient restart of O'Donoghue and Candès (2015). The first L comes from power
 * iterations on differences of gradients. One round evaluates the next x (value) and the next y (value and gradient)
 * together, so that backtracking costs a round only where L was too small.
 */
export function gradient(problem: BaselineProblem): BaselineRun {
  const { sites, penalty, start } = problem;
  const p = start.length;
  const watch = new GapWatch(problem);
  const first = pooled(sites, start);
  const scale = flooredDiagonal(
    sumOf(sites.map((site) => must(site.evaluate(start, 'diagonal')).diagonal ?? start)),
  );
  watch.count(2 * p + 1, p);
  let bound = largestEigenvalue(problem, first.gradient, scale, watch);
  let x = start;
  let y = start;
  let at = first;
  let momentum = 1;
  watch.look(x);
  while (!watch.done) {
    const metric = scale.map((value) => bound * value);
    const next = zStepDiagonal(
      penalty,
      metric,
      metric.map((value, j) => value * y[j] - at.gradient[j]),
    );
    const step = subtract(next, y);
    const weighted = metric.map((value, j) => value * step[j]);
    // restart where the last move goes against the gradient mapping
    const restart = dot(weighted, subtract(next, x)) < 0;
    const faster = restart ? 1 : (1 + Math.sqrt(1 + 4 * momentum * momentum)) / 2;
    const ahead = restart ? next : plusScaled(next, (momentum - 1) / faster, subtract(next, x));
    watch.count(p + 2, 2 * p);
    const { value } = pooled(sites, next);
    const promised = at.value + dot(at.gradient, step) + 0.5 * dot(weighted, step);
    if (value > promised + ROUNDING * Math.abs(value)) {
      bound *= BACKTRACKING;
      continue;
    }
    x = next;
    y = ahead;
    at = pooled(sites, ahead);
    momentum = faster;
    watch.look(x);
  }
  return watch.run;
}

function pooled(sites: readonly LocalSolver[], point: Float64Array) {
  const answers = sites.map((site) => must(site.evaluate(point, 'gradient')));
  return {
    value: answers.reduce((sum, answer) => sum + answer.value, 0),
    gradient: sumOf(answers.map((answer) => answer.gradient ?? point)),
  };
}

/** Of D^-½ H D^-½ at the start, from below; one round a power iteration. */
function largestEigenvalue(
  { sites, start }: BaselineProblem,
  gradientAtStart: Float64Array,
  scale: Float64Array,
  watch: GapWatch,
): number {
  const random = seededRandom(1);
  let v = scale.map(() => random.normal());
  let eigenvalue = 1;
  for (let k = 0; k < POWER_ROUNDS; k++) {
    const length = norm(v);
    v = v.map((value) => value / length);
    const point = start.map((value, j) => value + (DIFFERENCE * v[j]) / Math.sqrt(scale[j]));
    watch.count(start.length, start.length);
    const change = subtract(pooled(sites, point).gradient, gradientAtStart);
    const product = change.map((value, j) => value / (DIFFERENCE * Math.sqrt(scale[j])));
    eigenvalue = Math.max(eigenvalue, norm(product));
    v = product;
  }
  return eigenvalue;
}

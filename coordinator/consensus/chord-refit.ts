import { clipToBounds } from '../../numerics/penalty.js';
import { dot, subtract } from '../../numerics/vector.js';
import { modelStep, relativeTo } from './certificate.js';
import { endAt, progressAt } from './endings.js';
import { symmetricTimes } from './matrix.js';
import type { Certificate, Method, MethodEnd, Progress } from './method.js';
import { definiteMetric, diagonalOf, flooredDiagonal } from './metric.js';
import { evaluate, required } from './pooled.js';
import type { ConsensusProblem } from './problem.js';
import { bestTrial, linePoints, type Standing, standingAt, trialPoints } from './trial-points.js';

/** Safety factor on a decrement under a curvature that was learned, not measured. */
const LEARNED_FACTOR = 10;
const ROUNDS_MOST = 40;
const FAILURES_MOST = 6;
/** Of the curvature along a step, what a secant must keep at least (Powell 1978). */
const CURVATURE_KEPT = 0.2;

/**
 * A refit near a fit whose curvature is known: a term left out, a coefficient held, a site left out. Only values and
 * gradients are asked; the curvature, row-major p × p, begins as given and learns from the secants between the points
 * asked (BFGS, damped: Nocedal and Wright 2006, §18.3). Its certificate is an estimate.
 */
export function* chordRefit(problem: ConsensusProblem, curvature: Float64Array): Method {
  const { p, penalty: g } = problem;
  const start = clipToBounds(g, problem.start);
  const first = yield* evaluate([{ point: start, want: 'gradient' }], null, progressOf(null, null));
  let here = standingAt(
    problem,
    start,
    first.points[0].value,
    required(first.points[0].gradient, 'gradient'),
  );
  let model: Float64Array = definiteMetric(curvature, flooredDiagonal(diagonalOf(curvature, p)));
  let rounds = 1;
  let failures = 0;
  let certificate: Certificate | null = null;
  for (;;) {
    const step = modelStep(g, model, here.gradient, here.z);
    if (step === null)
      return ending(problem, here, certificate, rounds, 'stalled', 'the model could not be factored');
    const gap = LEARNED_FACTOR * step.decrement;
    certificate = {
      kind: 'estimate',
      gap,
      relativeGap: gap / relativeTo(here.objective),
      kkt: Math.sqrt(step.bend),
    };
    if (certificate.relativeGap <= problem.tolerance)
      return ending(problem, here, certificate, rounds, 'solved', null);
    if (rounds >= Math.min(problem.roundsMost, ROUNDS_MOST))
      return ending(problem, here, certificate, rounds, 'round-limit', null);
    if (failures >= FAILURES_MOST)
      return ending(problem, here, certificate, rounds, 'stalled', `no progress in ${FAILURES_MOST} rounds`);
    const trials =
      failures === 0 ? trialPoints(g, here.z, step.direction) : linePoints(g, here.z, step.direction);
    const answers = yield* evaluate(
      trials.map((point) => ({ point, want: 'gradient' })),
      null,
      progressOf(here, certificate),
    );
    rounds++;
    const tried = answers.points.map(({ value, gradient }, k) =>
      standingAt(problem, trials[k], value, required(gradient, 'gradient')),
    );
    for (const one of tried) model = withSecant(model, here, one) ?? model;
    const best = bestTrial(
      g,
      here,
      trials,
      tried.map(({ loss }) => loss),
    );
    failures = best === null ? failures + 1 : 0;
    if (best !== null) here = tried[best];
  }
}

/** The damped BFGS update by the secant from `here` to `there`; null where they are one point. */
function withSecant(model: Float64Array, here: Standing, there: Standing): Float64Array | null {
  const p = here.z.length;
  const s = subtract(there.z, here.z);
  const y = subtract(there.gradient, here.gradient);
  const product = symmetricTimes(model, s);
  const bend = dot(s, product);
  if (!(bend > 0)) return null;
  const along = dot(s, y);
  const keep = along >= CURVATURE_KEPT * bend ? 1 : ((1 - CURVATURE_KEPT) * bend) / (bend - along);
  const r = y.map((value, j) => keep * value + (1 - keep) * product[j]);
  const scale = dot(s, r);
  const out = new Float64Array(p * p);
  for (let i = 0; i < p; i++)
    for (let j = 0; j < p; j++)
      out[i * p + j] = model[i * p + j] - (product[i] * product[j]) / bend + (r[i] * r[j]) / scale;
  return out;
}

const ending = (
  problem: ConsensusProblem,
  here: Standing,
  certificate: Certificate | null,
  rounds: number,
  outcome: MethodEnd['outcome'],
  reason: string | null,
): MethodEnd =>
  endAt(problem, here, { outcome, reason, certificate, curvature: null, rounds, rung: 'proximal' });

const progressOf = (here: Standing | null, certificate: Certificate | null): Progress =>
  progressAt('proximal', here, certificate?.relativeGap ?? null, false, 'refits');

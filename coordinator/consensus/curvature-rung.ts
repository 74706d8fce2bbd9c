import { packSymmetric } from '../../numerics/packed.js';
import { dot, maxOf } from '../../numerics/vector.js';
import { zStepFull } from '../../numerics/z-step.js';
import { gapOf, type ModelStep, measuredCertificate, modelStep } from './certificate.js';
import { DAMPING_LEAST, Damping, FAILURES_MOST } from './damping.js';
import { endAt, progressAt } from './endings.js';
import { type Flaw, flawFromTheStart, separatedColumns, verdict } from './existence.js';
import type { Certificate, Method, MethodEnd, Progress } from './method.js';
import { definiteMetric, diagonalOf, flooredDiagonal, plusDiagonal, RIDGE } from './metric.js';
import { evaluate, type PooledEvaluation, required } from './pooled.js';
import type { ConsensusProblem } from './problem.js';
import {
  bestLinePoint,
  bestTrial,
  type Iterate,
  linePoints,
  standingAt,
  trialPoints,
} from './trial-points.js';

/** Weight of the proximal term that holds each site's own fit near z₀, in the site's own diagonal curvature. */
const OWN_FIT_HOLD = 0.3;
const UNFACTORED = 'the curvature could not be factored';

/**
 * The `curvature` rung: consensus steps (Z) on quadratic answers (quadratically approximated ADMM: Mokhtari, Shi, Ling,
 * Ribeiro 2016; with a shared z, proximal Newton: Lee, Sun, Saunders 2014), safeguarded by trial points along the step
 * and by damping. The answer that moved z is also the certificate of the new z.
 */
export function* curvatureRung(problem: ConsensusProblem): Method {
  const g = problem.penalty;
  const first = yield* evaluate(
    [{ point: problem.start, want: 'curvature' }],
    problem.quadratic ? null : { at: 0, hold: OWN_FIT_HOLD },
    progressOf(null, null, 'curvature at the start, own fits'),
  );
  let rounds = 1;
  let here = iterateFrom(problem, problem.start, first, 0);
  const { diagonal: startDiagonal } = here;
  const aliased = flawFromTheStart(problem, here.curvature);
  if (aliased !== null) return flawed(problem, here, null, rounds, aliased);
  let extra = ownFitPoint(problem, first, here);
  const damping = new Damping();
  for (;;) {
    const metric = definiteMetric(here.curvature, here.diagonal);
    const whole = modelStep(g, metric, here.gradient, here.z);
    if (problem.quadratic) return quadraticEnd(problem, here, whole, metric, rounds);
    const certificate =
      whole === null
        ? null
        : measuredCertificate(problem, here.z, here.gradient, whole.decrement, here.objective);
    if (whole !== null && certificate !== null) {
      const found = verdict(problem, certificate, here.curvature, whole, startDiagonal);
      if (found === 'stands') return ending(problem, after(here, whole), certificate, rounds, 'solved', null);
      if (found !== 'goes on') return flawed(problem, here, certificate, rounds, found);
    }
    const separated = separatedColumns(problem, here.z, here.loss);
    if (separated.length > 0)
      return flawed(problem, here, certificate, rounds, { reason: 'separable', columns: separated });
    if (rounds >= problem.roundsMost) return ending(problem, here, certificate, rounds, 'round-limit', null);
    if (damping.failures >= FAILURES_MOST)
      return ending(problem, here, certificate, rounds, 'stalled', `no progress in ${FAILURES_MOST} rounds`);

    const step =
      whole !== null && damping.amount === 0
        ? whole
        : (dampedStep(problem, here, metric, damping.amount) ?? whole);
    if (step === null) return ending(problem, here, null, rounds, 'stalled', UNFACTORED);
    const trials = [...trialPoints(g, here.z, step.direction), ...extra];
    const line = linePoints(g, here.z, step.direction);
    const withCurvature = problem.trialMatrices === 'all' ? trials.length : 1;
    const answers = yield* evaluate(
      [...trials, ...line].map((point, k) => ({ point, want: k < withCurvature ? 'curvature' : 'value' })),
      null,
      progressOf(here, whole, 'trial points'),
    );
    rounds++;
    extra = [];
    const values = answers.points.map((point) => point.value);
    const best = bestTrial(g, here, trials, values.slice(0, trials.length));
    if (best !== null) damping.succeeded();
    if (best !== null && best < withCurvature) {
      here = iterateFrom(problem, trials[best], answers, best);
      continue;
    }
    const onLine = best === null ? bestLinePoint(g, here, line, values.slice(trials.length)) : null;
    const better = best !== null ? trials[best] : onLine !== null ? line[onLine] : null;
    if (better === null) {
      damping.failed();
      continue;
    }
    const again = yield* evaluate(
      [{ point: better, want: 'curvature' }],
      null,
      progressOf(here, whole, 'curvature at the best trial point'),
    );
    rounds++;
    damping.foundShorter();
    here = iterateFrom(problem, better, again, 0);
  }
}

/**
 * The step under a damped metric, damped at least a little. Where curvature may vanish, a column has lost it rather
 * than never had it: columns of unit spread are damped alike.
 */
export function dampedStep(
  problem: ConsensusProblem,
  here: Iterate,
  metric: Float64Array,
  damping: number,
): ModelStep | null {
  const most = maxOf(here.diagonal);
  const diagonal = problem.curvatureMayVanish ? here.diagonal.map(() => most) : here.diagonal;
  const damped = plusDiagonal(metric, Math.max(damping, DAMPING_LEAST), diagonal);
  return modelStep(problem.penalty, damped, here.gradient, here.z);
}

/** One model step beyond `here`. */
export const after = (here: Iterate, step: ModelStep): Iterate => ({
  ...here,
  z: step.z,
  loss: here.loss + step.lossChange,
});

function iterateFrom(
  problem: ConsensusProblem,
  z: Float64Array,
  answers: PooledEvaluation,
  k: number,
): Iterate {
  const point = answers.points[k];
  const curvature = required(point.curvature, 'curvature');
  return {
    ...standingAt(problem, z, point.value, required(point.gradient, 'gradient')),
    curvature,
    diagonal: flooredDiagonal(diagonalOf(curvature, problem.p)),
  };
}

/** The minimiser of the summed quadratics at the sites' own fits, plus g: a further trial point. */
function ownFitPoint(problem: ConsensusProblem, first: PooledEvaluation, here: Iterate): Float64Array[] {
  if (first.ownFit === null) return [];
  const { curvature, linear } = first.ownFit;
  const metric = plusDiagonal(curvature, RIDGE, here.diagonal);
  const point = zStepFull(problem.penalty, metric, linear, here.z);
  return point === null ? [] : [point];
}

/** Squared loss: the model is the function, so the step is the solution, and the step after it its certificate. */
function quadraticEnd(
  problem: ConsensusProblem,
  here: Iterate,
  step: ModelStep | null,
  metric: Float64Array,
  rounds: number,
): MethodEnd {
  if (step === null) return ending(problem, here, null, rounds, 'stalled', UNFACTORED);
  const gradientAt = (z: Float64Array): Float64Array =>
    here.gradient.map((value, i) => {
      let sum = value;
      for (let j = 0; j < problem.p; j++) sum += here.curvature[i * problem.p + j] * (z[j] - here.z[j]);
      return sum;
    });
  const gradient = gradientAt(step.z);
  const next = modelStep(problem.penalty, metric, gradient, step.z);
  // the mean of the two slopes, exact for a quadratic: the metric may hold a ridge that the loss does not
  const loss = here.loss + 0.5 * (dot(here.gradient, step.direction) + dot(gradient, step.direction));
  const there: Iterate = {
    ...here,
    ...standingAt(problem, step.z, loss, gradient),
  };
  if (next === null) return ending(problem, there, null, rounds, 'stalled', UNFACTORED);
  const certificate = measuredCertificate(problem, step.z, gradient, next.decrement, there.objective);
  const solved = certificate.relativeGap <= problem.tolerance;
  return ending(
    problem,
    there,
    certificate,
    rounds,
    solved ? 'solved' : 'stalled',
    solved ? null : 'rounding keeps the gap above the tolerance',
  );
}

export const flawed = (
  problem: ConsensusProblem,
  here: Iterate,
  certificate: Certificate | null,
  rounds: number,
  { reason, columns }: Flaw,
): MethodEnd =>
  ending(
    problem,
    here,
    certificate,
    rounds,
    reason === 'separable' ? 'unbounded' : 'refused',
    reason,
    columns,
  );

export function ending(
  problem: ConsensusProblem,
  here: Iterate,
  certificate: Certificate | null,
  rounds: number,
  outcome: MethodEnd['outcome'],
  reason: string | null,
  columnsAtFault: readonly number[] = [],
): MethodEnd {
  const curvature = packSymmetric(here.curvature, problem.p);
  return endAt(problem, here, {
    outcome,
    reason,
    columnsAtFault,
    certificate,
    curvature,
    rounds,
    rung: 'curvature',
  });
}

const progressOf = (here: Iterate | null, step: ModelStep | null, purpose: string): Progress =>
  progressAt('curvature', here, gapOf(here, step), here !== null, purpose);

import { penaltyValue } from '../../numerics/penalty.js';
import { maxOf } from '../../numerics/vector.js';
import { type ModelStep, measuredCertificate, modelStep } from './certificate.js';
import { after, ending, flawed } from './curvature-rung.js';
import { flawFromTheStart, separatedColumns, verdict } from './existence.js';
import type { Certificate, MethodEnd } from './method.js';
import { definiteMetric } from './metric.js';
import type { ConsensusProblem } from './problem.js';
import type { Iterate } from './trial-points.js';

/** Share of the curvature at the start with which lack of rank can be told. */
const ALIVE = 1e-3;

/** What the answers of all sites at one point say: the end, or the step from here and how far from the optimum it is. */
export interface Judgement {
  readonly end: MethodEnd | null;
  readonly metric: Float64Array;
  readonly step: ModelStep | null;
  readonly certificate: Certificate | null;
}

/** Judges a point by curvature measured there, as the `curvature` rung does. `startDiagonal`: D. */
export function judge(
  problem: ConsensusProblem,
  here: Iterate,
  startDiagonal: Float64Array,
  rounds: number,
): Judgement {
  const metric = definiteMetric(here.curvature, here.diagonal);
  const step = modelStep(problem.penalty, metric, here.gradient, here.z);
  const certificate =
    step === null
      ? null
      : measuredCertificate(problem, here.z, here.gradient, step.decrement, here.objective);
  const judged = (end: MethodEnd | null): Judgement => ({ end, metric, step, certificate });
  const aliased = flawFromTheStart(problem, here.curvature);
  // far out curvature may have gone from every row: that is no lack of rank
  const alive = maxOf(here.diagonal) > ALIVE * maxOf(startDiagonal);
  if (aliased !== null && alive) return judged(flawed(problem, here, null, rounds, aliased));
  if (step !== null && certificate !== null) {
    const found = verdict(problem, certificate, here.curvature, step, startDiagonal);
    if (found === 'stands')
      return judged(ending(problem, after(here, step), certificate, rounds, 'solved', null));
    if (found !== 'goes on') return judged(flawed(problem, here, certificate, rounds, found));
  }
  const columns = separatedColumns(problem, here.z, here.loss);
  return columns.length === 0
    ? judged(null)
    : judged(flawed(problem, here, certificate, rounds, { reason: 'separable', columns }));
}

/** The end, at the round limit, at a point that not all sites have measured: f and F there are the models'. */
export const unmeasuredEnd = (
  problem: ConsensusProblem,
  z: Float64Array,
  objective: number,
  rounds: number,
): MethodEnd => ({
  outcome: 'round-limit',
  reason: null,
  columnsAtFault: [],
  z,
  loss: objective - penaltyValue(problem.penalty, z),
  penalty: penaltyValue(problem.penalty, z),
  certificate: null,
  curvature: null,
  rounds,
  rung: 'curvature',
});

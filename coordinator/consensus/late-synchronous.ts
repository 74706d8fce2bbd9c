import { relativeTo } from './certificate.js';
import { dampedStep, ending } from './curvature-rung.js';
import { Damping, FAILURES_MOST } from './damping.js';
import type { LateDesk } from './late-desk.js';
import type { LateAnswers, LateAsk } from './late-method.js';
import type { LateModels } from './late-models.js';
import { iterateAt, type LatePoint, latePoint } from './late-points.js';
import { takeAnswers } from './late-replies.js';
import { judge } from './late-verdict.js';
import type { MethodEnd } from './method.js';
import type { ConsensusProblem } from './problem.js';
import { type Iterate, isNoRise } from './trial-points.js';

/** Relative gap of a point worth going on from. */
const NEAR = 1;

/**
 * All sites in every round, from the best point that all have measured: proximal Newton with damping (Marquardt 1963),
 * one point a round. What is left where older answers mislead.
 */
export function* synchronousRun(
  problem: ConsensusProblem,
  desk: LateDesk<LatePoint>,
  models: LateModels,
  best: Iterate | null,
): Generator<LateAsk, MethodEnd, LateAnswers> {
  let here = yield* begun(problem, desk, models, best);
  const startDiagonal = here.diagonal;
  const damping = new Damping();
  for (;;) {
    const { end, metric, step: whole, certificate } = judge(problem, here, startDiagonal, desk.rounds);
    if (end !== null) return end;
    const ended = (outcome: 'round-limit' | 'stalled', reason: string | null): MethodEnd =>
      ending(problem, here, certificate, desk.rounds, outcome, reason);
    if (desk.rounds >= problem.roundsMost) return ended('round-limit', null);
    if (damping.failures >= FAILURES_MOST) return ended('stalled', `no progress in ${FAILURES_MOST} rounds`);
    const step =
      whole !== null && damping.amount === 0
        ? whole
        : (dampedStep(problem, here, metric, damping.amount) ?? whole);
    if (step === null) return ended('stalled', 'the curvature could not be factored');
    const gap = step.decrement / relativeTo(here.objective);
    const next = yield* measureAt(problem, desk, models, step.z, { here, gap });
    if (isNoRise(here, next.objective)) {
      damping.succeeded();
      here = next;
    } else damping.failed();
  }
}

/** The best point, or, where that is far from the optimum, the better one of it and z₀. */
function* begun(
  problem: ConsensusProblem,
  desk: LateDesk<LatePoint>,
  models: LateModels,
  best: Iterate | null,
): Generator<LateAsk, Iterate, LateAnswers> {
  if (best !== null) {
    const gap = judge(problem, best, best.diagonal, desk.rounds).certificate?.relativeGap;
    if (gap !== undefined && gap <= NEAR) return best;
  }
  const start = yield* measureAt(problem, desk, models, problem.start, null);
  return best !== null && best.objective < start.objective ? best : start;
}

function* measureAt(
  problem: ConsensusProblem,
  desk: LateDesk<LatePoint>,
  models: LateModels,
  z: Float64Array,
  shown: { readonly here: Iterate; readonly gap: number } | null,
): Generator<LateAsk, Iterate, LateAnswers> {
  const point = latePoint(problem, z, null);
  const everyone = [...point.answers.keys()];
  const post = { kind: 'evaluate', point: z, want: 'curvature' } as const;
  const arrivals = yield* desk.ask(
    everyone.map((site) => ({ site, post, note: point })),
    { waitFor: everyone, late: [] },
    {
      rung: 'curvature',
      purpose: 'quadratic answers of all sites',
      primalResidual: null,
      dualResidual: null,
      relativeGap: shown?.gap ?? null,
      gapMeasured: shown !== null,
      objective: shown?.here.objective ?? null,
    },
  );
  takeAnswers(arrivals, models);
  const measured = iterateAt(problem, point);
  if (measured === null)
    throw new TypeError('the barrier opened before all that were waited for had answered');
  return measured;
}

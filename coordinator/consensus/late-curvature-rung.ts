import { curvatureRung } from './curvature-rung.js';
import { withAllSites } from './late-all-sites.js';
import { LateDesk } from './late-desk.js';
import type { LateAnswers, LateAsk, LateBarrier, LateMethod } from './late-method.js';
import { LateModels } from './late-models.js';
import type { LatePoint } from './late-points.js';
import { takeAnswers } from './late-replies.js';
import { LateSearch } from './late-search.js';
import { synchronousRun } from './late-synchronous.js';
import type { MethodEnd } from './method.js';
import type { ConsensusProblem } from './problem.js';

/**
 * The `curvature` rung where not all sites are heard in a round: proximal Newton on the sum of per-site models. Each site's last
 * quadratic stands in for it,
 *
 *     z = argmin  s Σ_heard q_i(z) + g(z) ,
 *
 * punctual sites go on answering at z, and when that has settled each slow one is asked to solve its own loss and the
 * others' quadratics together (`joint`), a proximal problem in the others' metric: one answer is worth two steps and
 * holds what a certificate at z needs of it. `solved` only by what all sites have measured at one point.
 */
export function* lateCurvatureRung(problem: ConsensusProblem, barrier: LateBarrier): LateMethod {
  // squared loss: the first quadratics are the functions, and all that is needed
  if (problem.quadratic)
    return yield* withAllSites(new LateDesk<null>(barrier), null, curvatureRung(problem));
  const desk = new LateDesk<LatePoint>(barrier);
  const models = new LateModels(problem);
  const search = new LateSearch(problem, models, desk, 'curvature');
  return (
    (yield* searched(problem, models, desk, search)) ??
    (yield* synchronousRun(problem, desk, models, search.best))
  );
}

/** The search for the minimiser of the models and g; null where older answers mislead it, or its matrices are spent. */
export function* searched(
  problem: ConsensusProblem,
  models: LateModels,
  desk: LateDesk<LatePoint>,
  search: LateSearch,
): Generator<LateAsk, MethodEnd | null, LateAnswers> {
  for (;;) {
    const arrivals = yield* desk.ask(search.postings, search.barrier(), search.progress());
    const taken = takeAnswers(arrivals, models);
    const cut = search.overshot(taken);
    if (cut !== null) search.shorten(cut, taken);
    else for (const { site, model } of taken) models.learn(site, model);
    const end = search.judgeComplete(taken);
    if (end !== null) return end;
    if (desk.rounds >= problem.roundsMost) return search.endUnsolved();
    if (cut === null) search.advance(taken);
    search.post();
    if (search.misled()) return null;
  }
}

import { runawayColumns } from '../../numerics/determined.js';
import { measuredFactor } from './certificate.js';
import { curvatureRung } from './curvature-rung.js';
import { withAllSites } from './late-all-sites.js';
import { searched } from './late-curvature-rung.js';
import { LateDesk } from './late-desk.js';
import type { LateAnswers, LateAsk, LateBarrier, LateMethod } from './late-method.js';
import { LateModels } from './late-models.js';
import { partialBarrier, type Sent } from './late-partial-barrier.js';
import { type LatePoint, latePoint } from './late-points.js';
import { LateSearch } from './late-search.js';
import type { MethodEnd } from './method.js';
import type { ConsensusProblem } from './problem.js';
import { look, progressOf, standingFrom } from './proximal-certificate.js';
import { proximalRung } from './proximal-rung.js';
import { SiteModels } from './site-models.js';
import type { Iterate } from './trial-points.js';

/** Matrices a site must let leave for a search: two in a joint answer, one for the certificate. */
const SEARCH_MATRICES_LEAST = 3;
/** Rounds with a partial barrier, unrelaxed and unaccelerated, after which all sites are waited for and it is neither. */
const PARTIAL_ROUNDS_MOST = 60;
/** Relative decrease still promised at a point from which the step beyond is worth an estimate. */
const NEAR = 1e-3;
/** Rounds kept for what follows a search that has not certified: an estimate, a start, a last certificate. */
const ROUNDS_KEPT = 3;

/**
 * The `proximal` rung where not all sites are heard in a round. Where three curvature matrices of each site may leave, they
 * are spent as on the `curvature` rung: at the start, at the solution of a slow site's joint problem, and for the
 * certificate; between them models follow the gradients by secants. Where that is not enough, all sites are waited for, on
 * the rung as it is without late ones. Where fewer matrices may leave: consensus ADMM with
 * a partial barrier, and after 60 rounds of it the same.
 */
export function* lateProximalRung(problem: ConsensusProblem, barrier: LateBarrier): LateMethod {
  // the model of a squared loss is the function: one matrix, anywhere, solves it
  if (problem.quadratic && problem.curvatureMost > 0)
    return proximal(yield* withAllSites(new LateDesk<null>(barrier), null, curvatureRung(problem)));
  if (problem.curvatureMost < SEARCH_MATRICES_LEAST)
    return yield* withoutSearch(problem, new LateDesk<Sent>(barrier));
  const desk = new LateDesk<LatePoint>(barrier);
  const models = new LateModels(problem);
  yield* timed(problem, desk);
  const search = new LateSearch(problem, models, desk, 'proximal');
  const most = problem.roundsMost;
  const end = yield* searched({ ...problem, roundsMost: most - ROUNDS_KEPT }, models, desk, search);
  if (end !== null) return proximal(end);
  const left = { ...problem, curvatureMost: search.budget.least() };
  const gap = search.certificate?.relativeGap ?? Number.POSITIVE_INFINITY;
  const near = gap <= NEAR * measuredFactor(problem);
  const beyond = near ? beyondBest(left, models, search.best, desk.rounds) : null;
  if (beyond !== null) {
    // the last matrices did not certify their own point, but the step beyond it is far nearer to the optimum
    const note = latePoint(problem, beyond.z, null);
    const seen = yield* withAllSites(desk, note, look(left, beyond.standing, beyond.z));
    if (seen !== null) return seen;
  }
  const start = beyond?.z ?? problem.start;
  return yield* inStep({ ...left, start }, desk, latePoint(problem, start, null));
}

/** With a partial barrier while that leads somewhere. */
function* withoutSearch(problem: ConsensusProblem, desk: LateDesk<Sent>): LateMethod {
  const roundsMost = Math.min(PARTIAL_ROUNDS_MOST, problem.roundsMost - ROUNDS_KEPT);
  const { end, matricesLeft } = yield* partialBarrier({ ...problem, roundsMost }, desk);
  if (end.outcome !== 'round-limit') return end;
  return yield* inStep({ ...problem, start: end.z, curvatureMost: matricesLeft }, desk, null);
}

/** The rung as it is without late sites: all are waited for. */
function* inStep<Note>(problem: ConsensusProblem, desk: LateDesk<Note>, note: Note): LateMethod {
  const before = desk.rounds;
  const rest = { ...problem, roundsMost: problem.roundsMost - before };
  const end = yield* withAllSites(desk, note, proximalRung(rest));
  return { ...end, rounds: before + end.rounds };
}

const proximal = (end: MethodEnd): MethodEnd => ({ ...end, rung: 'proximal' });

/** A round that costs no matrix, where nobody is known to be slow: who is will show. */
function* timed(problem: ConsensusProblem, desk: LateDesk<LatePoint>): Generator<LateAsk, void, LateAnswers> {
  if (desk.slow().length > 0) return;
  const note = latePoint(problem, problem.start, null);
  const post = { kind: 'evaluate', point: note.z, want: 'gradient' } as const;
  const postings = desk.sites().map((site) => ({ site, post, note }));
  const waitFor = desk.sites().filter((i) => desk.isOld(i));
  yield* desk.ask(postings, { waitFor, late: [] }, progressOf(null, 'gradients at the start', null));
}

/** One step beyond the best point measured, and what an estimate there rests on. Null while a site is unheard. */
function beyondBest(problem: ConsensusProblem, models: LateModels, best: Iterate | null, rounds: number) {
  const own = models.all();
  if (own === null || best === null) return null;
  const step = models.step(best.z);
  if (step === null) return null;
  // where the loss runs off along columns without a penalty, an estimate far out would take that for an optimum
  const away = problem.curvatureMayVanish
    ? []
    : runawayColumns(step.direction, step.bend, models.startDiagonal());
  if (away.some((j) => problem.penalty.l1[j] === 0 && problem.penalty.l2[j] === 0)) return null;
  const { z } = step;
  const learned = new SiteModels(
    problem.penalty,
    own.map(({ point }) => point),
    own.map(({ gradient }) => gradient),
    own.map(({ curvature }) => Float64Array.from(curvature)),
    models.startDiagonal(),
  );
  const standing = standingFrom(problem, models.startDiagonal(), best.objective, learned);
  return { z, standing: { ...standing, rounds } };
}

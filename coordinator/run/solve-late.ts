import type { WorkAnswer } from '../../protocol/messages/round.js';
import { lateCurvatureRung } from '../consensus/late-curvature-rung.js';
import type { LateAsk, LateBarrier, LateMethod } from '../consensus/late-method.js';
import { lateProximalRung } from '../consensus/late-proximal-rung.js';
import type { MethodEnd, Progress } from '../consensus/method.js';
import type { ConsensusProblem } from '../consensus/problem.js';
import { LatePosts } from './late-posts.js';
import { wholeFrame } from './part-frames.js';
import { consensusProblem, type Grounds } from './problems.js';
import { refusalsOf } from './refusals.js';
import type { Rounds } from './rounds.js';
import { type Batch, memberName, type RunAsk, type Shown } from './run.js';
import type { RungChoice } from './rung.js';
import { fitCount, lambdasOf } from './scale.js';
import { progressAtEnd, type Solved } from './solve.js';
import type { Stop } from './survey.js';

/**
 * Whether every round hears every site: where the specification says so; on the rungs that have no other way (the
 * pooled one asks once; sketches taken at different points do not add up); and for a path or a cross-validation, whose
 * many problems share each round.
 */
export const waitsForAll = ({ specification, choice }: Grounds): boolean =>
  specification.barrier.quorum === 'all' ||
  choice.rung === 'pooled' ||
  choice.rung === 'sketched' ||
  specification.choose !== null ||
  specification.penalties.some(({ path }) => path !== null);

/** Stage three where a quorum ends a round: the fits one after another, older answers standing in for late ones. */
export function* solveLate(grounds: Grounds, rounds: Rounds): Generator<RunAsk, Solved | Stop, Batch> {
  const { specification, roster, survey, frame, choice } = grounds;
  const { quorum, oldest } = specification.barrier;
  const most = roster.length;
  const barrier = { quorum: quorum === 'all' ? most : Math.min(quorum, most), oldest, agesMs: survey.agesMs };
  const lambdas = Array.from({ length: fitCount(specification) }, (_, fit) =>
    lambdasOf(specification, fit, null),
  );
  const whole = wholeFrame(specification, frame, survey);
  const ends: MethodEnd[] = [];
  rounds.newProblems(lambdas.length);
  for (const [fit, own] of lambdas.entries()) {
    const problem = consensusProblem(grounds, whole, own, fit);
    const fits = { fit, open: lambdas.length - fit, total: lambdas.length };
    const end = yield* lateFit(grounds, rounds, fits, problem, lateMethodOn(choice.rung, problem, barrier));
    if (!('z' in end)) return end;
    ends.push(end);
  }
  return { lambdas, ends, folds: [], first: null };
}

interface FitOf {
  readonly fit: number;
  readonly open: number;
  readonly total: number;
}

function* lateFit(
  { roster, frame, specification }: Grounds,
  rounds: Rounds,
  fits: FitOf,
  problem: ConsensusProblem,
  method: LateMethod,
): Generator<RunAsk, MethodEnd | Stop, Batch> {
  const { tolerance } = specification.rounds;
  const posts = new LatePosts(fits.fit, problem);
  const roundsBefore = rounds.round;
  const newest = roster.map(() => 0);
  for (let step = method.next(); ; ) {
    if (step.done) return step.value;
    const asked: LateAsk = step.value;
    const ask = rounds.nextAsk;
    const works = posts.works(asked.posts, ask);
    for (const [i, own] of works.entries()) if (own !== null) newest[i] = ask;
    rounds.sent(works);
    const barrier = { waitFor: asked.waitFor, quorum: asked.quorum };
    const { scaling } = frame;
    const batch: Batch = yield { stage: 'solve', works, scaling, shown: rounds.shown, barrier };
    const refused = refusalsOf(batch.replies, roster);
    if (refused !== null) return refused;
    rounds.came(batch.replies as readonly (readonly WorkAnswer[] | null)[]);
    step = method.next(posts.answers(batch, newest));
    const progress = step.done ? progressAtEnd(step.value, tolerance) : step.value.progress;
    rounds.shown = shownRound(rounds, fits, asked, progress, tolerance, roundsBefore);
  }
}

function shownRound(
  rounds: Rounds,
  fits: FitOf,
  { progress: { purpose }, standIns }: LateAsk,
  progress: Progress,
  tolerance: number,
  roundsBefore: number,
): Shown {
  return {
    kind: 'round',
    stage: 'solve',
    round: rounds.round,
    // what this round was for, and what its answers have shown
    progress: { ...progress, purpose },
    tolerance,
    fitsOpen: fits.open,
    fitsTotal: fits.total,
    standIns: standIns.map(({ site, round: of }) => ({
      site: memberName(rounds.roster[site]),
      round: of === null ? null : roundsBefore + of,
    })),
  };
}

function lateMethodOn(rung: RungChoice['rung'], problem: ConsensusProblem, barrier: LateBarrier): LateMethod {
  return rung === 'curvature' ? lateCurvatureRung(problem, barrier) : lateProximalRung(problem, barrier);
}

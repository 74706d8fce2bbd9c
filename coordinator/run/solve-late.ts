import type { WorkAnswer } from '../../protocol/messages/round.js';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { lateCurvatureRung } from '../consensus/late-curvature-rung.js';
import type { LateAsk, LateBarrier, LateMethod } from '../consensus/late-method.js';
import { lateProximalRung } from '../consensus/late-proximal-rung.js';
import type { MethodEnd, Progress } from '../consensus/method.js';
import type { ConsensusProblem } from '../consensus/problem.js';
import { LatePosts } from './late-posts.js';
import { refusalsOf } from './refusals.js';
import { type Batch, type Member, memberName, type RunAsk, type Shown } from './run.js';
import type { RungChoice } from './rung.js';
import { type Frame, fitCount } from './scale.js';
import { type Before, consensusProblem, progressAtEnd, type Solved } from './solve.js';
import type { PooledSurvey, Stop } from './survey.js';
import { numbersDown } from './traffic.js';

/**
 * Whether every round hears every site: where the specification says so, and on the rungs that have no other way (the
 * pooled one asks once; sketches taken at different points do not add up).
 */
export const waitsForAll = ({ barrier }: FitSpecification, { rung }: RungChoice): boolean =>
  barrier.quorum === 'all' || rung === 'pooled' || rung === 'sketched';

/** Stage three where a quorum ends a round: the fits one after another, older answers standing in for late ones. */
export function* solveLate(
  specification: FitSpecification,
  roster: readonly Member[],
  survey: PooledSurvey,
  frame: Frame,
  choice: RungChoice,
  surveyed: Shown,
  before: Before,
): Generator<RunAsk, Solved | Stop, Batch> {
  const { quorum, oldest } = specification.barrier;
  const most = roster.length;
  const barrier = { quorum: quorum === 'all' ? most : Math.min(quorum, most), oldest, agesMs: survey.agesMs };
  const fitsTotal = fitCount(specification);
  const stage: LateStage = {
    roster,
    frame,
    tolerance: specification.rounds.tolerance,
    before,
    fitsTotal,
    round: 0,
    shown: surveyed,
    up: roster.map(() => 0),
    down: roster.map(() => 0),
  };
  const ends: MethodEnd[] = [];
  for (let fit = 0; fit < fitsTotal; fit++) {
    const problem = consensusProblem(specification, survey, frame, choice, fit);
    const end = yield* lateFit(stage, fit, problem, lateMethodOn(choice.rung, problem, barrier));
    if (!('z' in end)) return end;
    ends.push(end);
  }
  const { round: rounds, shown, up, down } = stage;
  return { ends, rounds, shown, up, down };
}

/** What the fits of the stage add to. */
interface LateStage {
  readonly roster: readonly Member[];
  readonly frame: Frame;
  readonly tolerance: number;
  readonly before: Before;
  readonly fitsTotal: number;
  round: number;
  shown: Shown;
  readonly up: number[];
  readonly down: number[];
}

function* lateFit(
  stage: LateStage,
  fit: number,
  problem: ConsensusProblem,
  method: LateMethod,
): Generator<RunAsk, MethodEnd | Stop, Batch> {
  const { roster, before, up, down } = stage;
  const posts = new LatePosts(fit, problem);
  const roundsBefore = before.rounds + stage.round;
  const newest = roster.map(() => 0);
  for (let step = method.next(); ; ) {
    if (step.done) return step.value;
    const asked: LateAsk = step.value;
    stage.round++;
    const ask = before.asks + stage.round;
    const works = posts.works(asked.posts, ask);
    for (const [i, own] of works.entries()) {
      if (own === null) continue;
      newest[i] = ask;
      for (const work of own) down[i] += numbersDown(work, ask);
    }
    const batch: Batch = yield {
      stage: 'solve',
      works,
      scaling: stage.frame.scaling,
      shown: stage.shown,
      barrier: { waitFor: asked.waitFor, quorum: asked.quorum },
    };
    const refused = refusalsOf(batch.replies, roster);
    if (refused !== null) return refused;
    for (const [i, reply] of batch.replies.entries())
      for (const answer of (reply ?? []) as readonly WorkAnswer[]) up[i] += numbersOfAnswer(answer);
    step = method.next(posts.answers(batch, newest));
    const progress = step.done ? progressAtEnd(step.value, stage.tolerance) : step.value.progress;
    stage.shown = shownRound(stage, fit, asked, progress, roundsBefore);
  }
}

function shownRound(
  { roster, before, round, tolerance, fitsTotal }: LateStage,
  fit: number,
  { progress: { purpose }, standIns }: LateAsk,
  progress: Progress,
  roundsBefore: number,
): Shown {
  return {
    kind: 'round',
    round: before.rounds + round,
    // what this round was for, and what its answers have shown
    progress: { ...progress, purpose },
    tolerance,
    fitsOpen: fitsTotal - fit,
    fitsTotal,
    standIns: standIns.map(({ site, round: of }) => ({
      site: memberName(roster[site]),
      round: of === null ? null : roundsBefore + of,
    })),
  };
}

function lateMethodOn(rung: RungChoice['rung'], problem: ConsensusProblem, barrier: LateBarrier): LateMethod {
  return rung === 'curvature' ? lateCurvatureRung(problem, barrier) : lateProximalRung(problem, barrier);
}

import type { WorkAnswer } from '../../protocol/messages/round.js';
import { packedLength } from '../../protocol/messages/vector.js';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { curvatureRung } from '../consensus/curvature-rung.js';
import type { Method, MethodEnd, Progress } from '../consensus/method.js';
import { pooledRung } from '../consensus/pooled-rung.js';
import type { ConsensusProblem } from '../consensus/problem.js';
import { proximalRung } from '../consensus/proximal-rung.js';
import { sketchedRung } from '../consensus/sketched-rung.js';
import { Lockstep } from './lockstep.js';
import { refusalsOf } from './refusals.js';
import { askAll, type Batch, type Member, type RunAsk, type Shown } from './run.js';
import type { RungChoice } from './rung.js';
import { type Frame, fitCount, interceptOnly, penaltyOn } from './scale.js';
import type { PooledSurvey, Stop } from './survey.js';
import { numbersDown } from './traffic.js';

/**
 * Numbers in one curvature matrix up to which it is asked at every trial point: above it (400 kB, some 315 columns) the
 * bytes cost more than the round they may save. By size, not by the measured speed of the links: the weather of a
 * network must not change a bit of the result.
 */
const TRIAL_NUMBERS_MOST = 50_000;

/** What the solve stage leaves: one end per fit, the rounds it took and the numbers that moved. */
export interface Solved {
  readonly ends: readonly MethodEnd[];
  readonly rounds: number;
  readonly shown: Shown;
  readonly up: readonly number[];
  readonly down: readonly number[];
}

/** What a run had asked before this stage began: asks, the survey's among them, and rounds of a solve stage. */
export interface Before {
  readonly asks: number;
  readonly rounds: number;
}

/** Stage three: the consensus method on the rung chosen, one problem per fit, all in lock-step. */
export function* solve(
  specification: FitSpecification,
  roster: readonly Member[],
  survey: PooledSurvey,
  frame: Frame,
  choice: RungChoice,
  surveyed: Shown,
  before: Before,
): Generator<RunAsk, Solved | Stop, Batch> {
  const fits = fitCount(specification);
  const methods = Array.from({ length: fits }, (_, fit) =>
    methodOn(choice.rung, consensusProblem(specification, survey, frame, choice, fit)),
  );
  const lockstep = new Lockstep(methods, roster.length);
  const up = roster.map(() => 0);
  const down = roster.map(() => 0);
  let shown = surveyed;
  let round = 0;
  while (lockstep.asks.length > 0) {
    const askNumber = before.asks + round + 1;
    const works = lockstep.works(askNumber);
    const { answers } = yield* askAll({ stage: 'solve', works, scaling: frame.scaling, shown });
    const refused = refusalsOf(answers, roster);
    if (refused !== null) return refused;
    const given = answers as readonly (readonly WorkAnswer[])[];
    round++;
    given.forEach((own, i) => {
      up[i] += own.reduce((sum, answer) => sum + numbersOfAnswer(answer), 0);
      down[i] += works[i].reduce((sum, work) => sum + numbersDown(work, askNumber), 0);
    });
    const asked = lockstep.asks.map(({ progress }) => progress);
    lockstep.receive(given, askNumber);
    shown = {
      kind: 'round',
      round: before.rounds + round,
      // what this round was for, and what its answers have shown
      progress: {
        ...shownProgress(lockstep, specification.rounds.tolerance),
        purpose: asked.reduce(farthest).purpose,
      },
      tolerance: specification.rounds.tolerance,
      fitsOpen: asked.length,
      fitsTotal: fits,
      standIns: [],
    };
  }
  return { ends: lockstep.ends, rounds: round, shown, up, down };
}

export function consensusProblem(
  specification: FitSpecification,
  survey: PooledSurvey,
  frame: Frame,
  choice: RungChoice,
  fit: number,
): ConsensusProblem {
  return {
    p: frame.p,
    siteWeights: survey.sites.map(({ rowsUsed }) => rowsUsed / survey.rowsTotal),
    penalty: penaltyOn(specification, frame, fit),
    start: interceptOnly(specification, frame, survey),
    tolerance: specification.rounds.tolerance,
    roundsMost: specification.rounds.most,
    quadratic: specification.loss.kind === 'squared',
    separatedBelow: separatedBelow(specification, survey),
    curvatureMayVanish: specification.loss.kind === 'huber',
    curvatureMost: choice.curvatureMost,
    trialMatrices: packedLength(frame.p) <= TRIAL_NUMBERS_MOST ? 'all' : 'first',
    sketch: choice.sketch,
    seed: fit,
  };
}

/** See `ConsensusProblem`: rows of a 0/1 response, each counted once. */
function separatedBelow({ loss, weights, offset }: FitSpecification, survey: PooledSurvey): number | null {
  return loss.kind === 'logistic' && weights === null && offset === null ? Math.LN2 / survey.rowsTotal : null;
}

function methodOn(rung: RungChoice['rung'], problem: ConsensusProblem): Method {
  switch (rung) {
    case 'pooled':
      return pooledRung(problem);
    case 'curvature':
      return curvatureRung(problem);
    case 'sketched':
      return sketchedRung(problem);
    case 'proximal':
      return proximalRung(problem);
  }
}

/** Of two fits, the one farther from its optimum. */
const farthest = (a: Progress, b: Progress): Progress =>
  (b.relativeGap ?? Number.POSITIVE_INFINITY) > (a.relativeGap ?? Number.POSITIVE_INFINITY) ? b : a;

/** Of the fits still open, the one farthest from the tolerance; once all have ended, the worst certificate. */
function shownProgress(lockstep: Lockstep, tolerance: number): Progress {
  const open = lockstep.asks.map(({ progress }) => progress);
  if (open.length > 0) return open.reduce(farthest);
  return lockstep.ends.map((end) => progressAtEnd(end, tolerance)).reduce(farthest);
}

/** What the last round of a fit has shown. */
export const progressAtEnd = (end: MethodEnd, tolerance: number): Progress => ({
  rung: end.rung,
  purpose: 'certificate',
  primalResidual: null,
  dualResidual: null,
  relativeGap: end.certificate?.relativeGap ?? null,
  gapMeasured: (end.certificate?.relativeGap ?? Number.POSITIVE_INFINITY) <= tolerance,
  objective: end.loss + end.penalty,
});

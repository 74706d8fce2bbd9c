import type { MethodAsk, MethodEnd, Progress, SiteAnswers } from '../consensus/method.js';
import { lambdaPath } from './lambda-path.js';
import { Lockstep, type LockstepProblem } from './lockstep.js';
import { type PartFrame, perRowOf, trainingFrames, wholeFrame } from './part-frames.js';
import { consensusProblem, type Grounds, methodOn } from './problems.js';
import { isStop, type Rounds } from './rounds.js';
import type { AfterSurvey, Batch, RunAsk, Shown } from './run.js';
import { fitCount, lambdasOf } from './scale.js';
import { startGradient } from './start-answers.js';
import type { Stop } from './survey.js';

/** What the solve stage leaves. */
export interface Solved {
  /** Per fit: the λ of each penalty. */
  readonly lambdas: readonly (readonly number[])[];
  /** Per fit, on all rows. */
  readonly ends: readonly MethodEnd[];
  /** Per fold and fit, on the rows outside the fold. */
  readonly folds: readonly { readonly rows: PartFrame; readonly ends: readonly MethodEnd[] }[];
  /** The answers of all sites to the first ask about all rows, where they were kept. */
  readonly first: SiteAnswers | null;
}

/**
 * Stage three: the consensus method on the rung chosen, one problem per fit and, with a cross-validation, per fit and
 * fold, all in lock-step.
 */
export function* solve(grounds: Grounds, rounds: Rounds): Generator<RunAsk, Solved | Stop, Batch> {
  const { specification, frame, survey, choice } = grounds;
  const whole = wholeFrame(specification, frame, survey);
  const parts = [whole, ...trainingFrames(specification, frame, survey)];
  const hasPath = specification.penalties.some(({ path }) => path !== null);
  const fits = fitCount(specification);

  let first: readonly SiteAnswers[] | null = null;
  let path: readonly number[] | null = null;
  if (hasPath || parts.length > 1 || choice.rung === 'pooled') {
    const started = yield* startAll(grounds, rounds, parts);
    if (isStop(started)) return started;
    first = started;
    if (hasPath) path = lambdaPath(specification, frame, startGradient(first[0], whole, frame.p));
    if (hasPath && path === null)
      return {
        outcome: 'refused',
        reason: 'every slope is zero whatever λ: there is no path to choose from.',
      };
  }

  const lambdas = Array.from({ length: fits }, (_, fit) => lambdasOf(specification, fit, path));
  const problems = parts.flatMap((rows, at) =>
    lambdas.map((own, fit): LockstepProblem => {
      const method = methodOn(choice.rung, consensusProblem(grounds, rows, own, at * fits + fit));
      return {
        method: first === null ? method : continued(method, first[at]),
        part: rows.part,
        sites: [...grounds.roster.keys()],
      };
    }),
  );
  const ends = yield* advance(grounds, rounds, problems, 'solve', rounds.newProblems(problems.length));
  if (isStop(ends)) return ends;
  const of = (at: number): MethodEnd[] =>
    ends.slice(at * fits, (at + 1) * fits).map((end) => perRowOf(end, parts[at]));
  const folds = parts.slice(1).map((rows, k) => ({ rows, ends: of(k + 1) }));
  return { lambdas, ends: of(0), folds, first: first?.[0] ?? null };
}

/** Advances problems in lock-step to their ends, in the order given. */
export function* advance<E extends object>(
  { survey, specification, choice }: Grounds,
  rounds: Rounds,
  problems: readonly LockstepProblem<E>[],
  stage: AfterSurvey,
  firstNumber = 0,
): Generator<RunAsk, E[] | Stop, Batch> {
  const { tolerance } = specification.rounds;
  const folds = choice.rung === 'pooled' ? survey.folds.map(({ fold }) => fold) : [];
  const lockstep = new Lockstep(problems, rounds.roster.length, folds, firstNumber);
  while (lockstep.asks.length > 0) {
    const ask = rounds.nextAsk;
    const answers = yield* rounds.ask(stage, lockstep.works(ask));
    if (isStop(answers)) return answers;
    const asked = lockstep.asks.map(({ progress }) => progress);
    lockstep.receive(answers, ask);
    rounds.shown = shownRound(rounds, stage, lockstep, asked, problems.length, tolerance);
  }
  return lockstep.ends;
}

/** The first ask of every part's method, which does not depend on the penalty, asked once for all fits. */
function* startAll(
  grounds: Grounds,
  rounds: Rounds,
  parts: readonly PartFrame[],
): Generator<RunAsk, SiteAnswers[] | Stop, Batch> {
  const sites = [...grounds.roster.keys()];
  const none = grounds.specification.penalties.map(() => 0);
  return yield* advance(
    grounds,
    rounds,
    parts.map((rows) => ({
      method: firstAnswers(methodOn(grounds.choice.rung, consensusProblem(grounds, rows, none, 0))),
      part: rows.part,
      sites,
    })),
    'solve',
  );
}

function* firstAnswers(
  method: Generator<MethodAsk, MethodEnd, SiteAnswers>,
): Generator<MethodAsk, SiteAnswers, SiteAnswers> {
  const { done, value } = method.next();
  if (done) throw new TypeError('a method ended before it asked anything');
  return yield value;
}

/** A method whose first ask has been answered. */
function* continued(
  method: Generator<MethodAsk, MethodEnd, SiteAnswers>,
  first: SiteAnswers,
): Generator<MethodAsk, MethodEnd, SiteAnswers> {
  method.next();
  for (let step = method.next(first); ; ) {
    if (step.done) return step.value;
    step = method.next(yield step.value);
  }
}

function shownRound<E extends object>(
  rounds: Rounds,
  stage: AfterSurvey,
  lockstep: Lockstep<E>,
  asked: readonly Progress[],
  total: number,
  tolerance: number,
): Shown {
  const open = lockstep.asks.map(({ progress }) => progress);
  const ended = lockstep.ends.filter((end): end is E & MethodEnd => end !== undefined && 'rung' in end);
  const shown = [...open, ...(open.length > 0 ? [] : ended.map((end) => progressAtEnd(end, tolerance)))];
  // what this round was for, and what its answers have shown
  const progress = shown.length > 0 ? shown.reduce(farthest) : asked.reduce(farthest);
  return {
    kind: 'round',
    stage,
    round: rounds.round,
    progress: { ...progress, purpose: asked.reduce(farthest).purpose },
    tolerance,
    fitsOpen: asked.length,
    fitsTotal: total,
    standIns: [],
  };
}

/** Of two fits, the one farther from its optimum. */
const farthest = (a: Progress, b: Progress): Progress =>
  (b.relativeGap ?? Number.POSITIVE_INFINITY) > (a.relativeGap ?? Number.POSITIVE_INFINITY) ? b : a;

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

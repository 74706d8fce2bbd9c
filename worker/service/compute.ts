import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { EvaluateWork } from '../../protocol/messages/evaluate.js';
import type { JointWork } from '../../protocol/messages/joint.js';
import type { Part } from '../../protocol/messages/part.js';
import type { WorkAnswer } from '../../protocol/messages/round.js';
import type { Allowance } from '../../protocol/messages/survey.js';
import type { FilledProblem, FilledWork } from '../custody/content.js';
import type { RawShard } from '../design/shard.js';
import { surveyOf } from '../design/survey.js';
import type { Evaluation } from '../local/evaluate.js';
import { margins } from '../local/margins.js';
import type { PartSolvers } from '../local/part-solvers.js';
import { quality } from '../local/quality.js';
import { scores } from '../local/scores.js';
import { siteFit } from '../local/site-fit.js';
import type { SiteSolvers } from '../local/site-solvers.js';
import type { Loss } from '../losses/loss.js';

/** What one ask is computed with. */
export interface Means {
  readonly raw: RawShard;
  readonly loss: Loss;
  /** Null until the scaling is known. */
  readonly solvers: SiteSolvers | null;
  readonly allowance: Allowance;
}

/** Lets other events in between two pieces of work; says `stop` when the answer is not wanted any more. */
export type Breathe = () => Promise<'go-on' | 'stop'>;

/** An answer in the making: yields between two pieces of work. */
type Steps = Generator<void, Checked<WorkAnswer>>;

/** Points that share one read of the rows; bounds what is kept beside an answer. */
const POINTS_TOGETHER = 8;

/** Answers of all work items in order, or the first failure; null where `breathe` said `stop`. */
export async function computeWorks(
  works: readonly FilledWork[],
  means: Means,
  breathe: Breathe,
): Promise<Checked<WorkAnswer[]> | null> {
  const answers: WorkAnswer[] = [];
  let evaluated: Evaluated = new Map();
  for (const [at, work] of works.entries()) {
    if (work.work === 'evaluate' && means.solvers !== null && !evaluated.has(work)) {
      const shared = await finished(evaluateTogether(batchFrom(works, at, work), means.solvers), breathe);
      if (shared === null || !shared.ok) return shared;
      evaluated = shared.value;
    }
    const answer = await finished(answerSteps(work, means, evaluated), breathe);
    if (answer === null || !answer.ok) return answer;
    answers.push(answer.value);
  }
  return succeed(answers);
}

async function finished<T>(steps: Generator<void, T>, breathe: Breathe): Promise<T | null> {
  for (;;) {
    if ((await breathe()) === 'stop') return null;
    const step = steps.next();
    if (step.done) return step.value;
  }
}

/** What was found at the points of evaluate works. */
type Evaluated = ReadonlyMap<FilledWork, readonly Evaluation[]>;

/** The work at `at` and those evaluate works after it on the same rows that share its reads of them. */
function batchFrom(works: readonly FilledWork[], at: number, first: EvaluateWork): EvaluateWork[] {
  const batch = [first];
  let points = first.points.length;
  for (const work of works.slice(at + 1)) {
    if (work.work !== 'evaluate' || !samePart(work.part, first.part)) break;
    points += work.points.length;
    if (points > POINTS_TOGETHER) break;
    batch.push(work);
  }
  return batch;
}

const samePart = (a: Part, b: Part): boolean => a?.fold === b?.fold && a?.side === b?.side;

function* evaluateTogether(
  batch: readonly EvaluateWork[],
  { parts }: SiteSolvers,
): Generator<void, Checked<Evaluated>> {
  const made = yield* parts.solver(batch[0].part).evaluateSteps(batch.flatMap(({ points }) => points));
  if (!made.ok) return made;
  let from = 0;
  return succeed(
    new Map(
      batch.map((work) => {
        const to = from + work.points.length;
        const own = made.value.slice(from, to);
        from = to;
        return [work, own];
      }),
    ),
  );
}

/** The answer to one work item, piece by piece; `evaluated` may have its points already. */
export function* answerSteps(
  work: FilledWork,
  { raw, loss, solvers, allowance }: Means,
  evaluated: Evaluated = new Map(),
): Steps {
  if (work.work === 'survey') return succeed({ work: 'survey', ...surveyOf(raw, loss), allowance });
  if (solvers === null) return fail('dimension-wrong', 'The scaling of the run is not known yet.');
  const { parts, scaling } = solvers;
  switch (work.work) {
    case 'proximal':
      return yield* proximal(work.problems, parts);
    case 'evaluate':
      return yield* evaluate(work, parts, evaluated.get(work) ?? null);
    case 'joint':
      return yield* joint(work, parts);
    case 'factor': {
      const factors = parts.factors(work.folds);
      return factors.ok ? succeed({ work: 'factor', factors: factors.value }) : factors;
    }
    case 'scores':
      return scores(parts, raw.clusters, work);
    case 'site-fit':
      return siteFit(parts, work);
    case 'margins':
      return yield* margins(parts, raw.margins, scaling, work);
    case 'quality':
      return quality(parts, work);
  }
}

function* proximal(asked: readonly FilledProblem[], parts: PartSolvers): Steps {
  const problems = [];
  for (const { problem, part, center, scale, diagonal, start } of asked) {
    if (problems.length > 0) yield;
    const solved = parts.solver(part).proximal(center, scale, diagonal, start);
    if (!solved.ok) return solved;
    problems.push({ problem, ...solved.value });
  }
  return succeed({ work: 'proximal', problems });
}

function* evaluate(work: EvaluateWork, parts: PartSolvers, evaluated: readonly Evaluation[] | null): Steps {
  const solver = parts.solver(work.part);
  const made = evaluated === null ? yield* solver.evaluateSteps(work.points) : succeed(evaluated);
  if (!made.ok) return made;
  const points = [...made.value];
  const { problem, ownFit, sketch } = work;
  if (ownFit !== null) yield;
  const own = ownFit === null ? succeed(null) : solver.ownFit(work.points[ownFit.at].point, ownFit.hold);
  if (!own.ok) return own;
  if (sketch !== null) yield;
  const products =
    sketch === null
      ? succeed(null)
      : solver.sketch(work.points[sketch.at].point, sketch.directions, sketch.columns);
  if (!products.ok) return products;
  return succeed({ work: 'evaluate', problem, points, ownFit: own.value, sketch: products.value });
}

function* joint({ problem, start, curvature, linear, l1, l2 }: JointWork, parts: PartSolvers): Steps {
  const end = yield* parts.solver(null).jointSteps(start, { curvature, linear }, l1, l2);
  return end.ok ? succeed({ work: 'joint', problem, ...end.value }) : end;
}

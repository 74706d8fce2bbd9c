import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { EvaluateWork } from '../../protocol/messages/evaluate.js';
import type { JointWork } from '../../protocol/messages/joint.js';
import type { WorkAnswer } from '../../protocol/messages/round.js';
import type { Allowance } from '../../protocol/messages/survey.js';
import type { FilledProblem, FilledWork } from '../custody/content.js';
import type { RawShard } from '../design/shard.js';
import { surveyOf } from '../design/survey.js';
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

/** Answers of all work items in order, or the first failure; null where `breathe` said `stop`. */
export async function computeWorks(
  works: readonly FilledWork[],
  means: Means,
  breathe: Breathe,
): Promise<Checked<WorkAnswer[]> | null> {
  const answers: WorkAnswer[] = [];
  for (const work of works) {
    const steps = answerSteps(work, means);
    for (;;) {
      if ((await breathe()) === 'stop') return null;
      const step = steps.next();
      if (!step.done) continue;
      if (!step.value.ok) return step.value;
      answers.push(step.value.value);
      break;
    }
  }
  return succeed(answers);
}

/** The answer to one work item, piece by piece. */
export function* answerSteps(work: FilledWork, { raw, loss, solvers, allowance }: Means): Steps {
  if (work.work === 'survey') return succeed({ work: 'survey', ...surveyOf(raw, loss), allowance });
  if (solvers === null) return fail('dimension-wrong', 'The scaling of the run is not known yet.');
  const { parts, scaling } = solvers;
  switch (work.work) {
    case 'proximal':
      return yield* proximal(work.problems, parts);
    case 'evaluate':
      return yield* evaluate(work, parts);
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

function* evaluate(work: EvaluateWork, parts: PartSolvers): Steps {
  const solver = parts.solver(work.part);
  const points = [];
  for (const { point, want } of work.points) {
    if (points.length > 0) yield;
    const evaluated = solver.evaluate(point, want);
    if (!evaluated.ok) return evaluated;
    points.push(evaluated.value);
  }
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

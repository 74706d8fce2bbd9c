import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { EvaluateWork } from '../../protocol/messages/evaluate.js';
import type { JointWork } from '../../protocol/messages/joint.js';
import type { WorkAnswer } from '../../protocol/messages/round.js';
import type { Allowance } from '../../protocol/messages/survey.js';
import type { FilledProblem, FilledWork } from '../custody/content.js';
import type { RawShard } from '../design/shard.js';
import { surveyOf } from '../design/survey.js';
import type { LocalSolver } from '../local/local-solver.js';
import type { Loss } from '../losses/loss.js';

/** What one ask is computed with. */
export interface Means {
  readonly raw: RawShard;
  readonly loss: Loss;
  /** Null until the scaling is known. */
  readonly solver: LocalSolver | null;
  readonly allowance: Allowance;
  /** Lets other events in between two pieces of work; says `stop` when the answer is not wanted any more. */
  readonly breathe: () => Promise<'go-on' | 'stop'>;
}

/** Null: told to stop on the way. */
type Computed<T> = Checked<T> | null;

/** Answers of all work items in order, or the first failure; null where `breathe` said `stop`. */
export async function computeWorks(
  works: readonly FilledWork[],
  means: Means,
): Promise<Computed<WorkAnswer[]>> {
  const answers: WorkAnswer[] = [];
  for (const work of works) {
    if ((await means.breathe()) === 'stop') return null;
    const answer = await computeWork(work, means);
    if (answer === null || !answer.ok) return answer;
    answers.push(answer.value);
  }
  return succeed(answers);
}

async function computeWork(work: FilledWork, means: Means): Promise<Computed<WorkAnswer>> {
  if (work.work === 'survey')
    return succeed({ work: 'survey', ...surveyOf(means.raw, means.loss), allowance: means.allowance });
  const { solver } = means;
  if (solver === null) return fail('dimension-wrong', 'The scaling of the run is not known yet.');
  if (work.work === 'proximal') return proximal(work.problems, solver, means);
  if (work.work === 'evaluate') return evaluate(work, solver, means);
  if (work.work === 'joint') return joint(work, solver, means);
  const factor = solver.factor();
  return factor.ok ? succeed({ work: 'factor', factor: factor.value }) : factor;
}

async function proximal(
  asked: readonly FilledProblem[],
  solver: LocalSolver,
  means: Means,
): Promise<Computed<WorkAnswer>> {
  const problems = [];
  for (const { problem, center, scale, diagonal, start } of asked) {
    if (problems.length > 0 && (await means.breathe()) === 'stop') return null;
    const solved = solver.proximal(center, scale, diagonal, start);
    if (!solved.ok) return solved;
    problems.push({ problem, ...solved.value });
  }
  return succeed({ work: 'proximal', problems });
}

async function evaluate(
  work: EvaluateWork,
  solver: LocalSolver,
  means: Means,
): Promise<Computed<WorkAnswer>> {
  const points = [];
  for (const { point, want } of work.points) {
    if (points.length > 0 && (await means.breathe()) === 'stop') return null;
    const evaluated = solver.evaluate(point, want);
    if (!evaluated.ok) return evaluated;
    points.push(evaluated.value);
  }
  const { problem, ownFit, sketch } = work;
  if (ownFit !== null && (await means.breathe()) === 'stop') return null;
  const own = ownFit === null ? succeed(null) : solver.ownFit(work.points[ownFit.at].point, ownFit.hold);
  if (!own.ok) return own;
  if (sketch !== null && (await means.breathe()) === 'stop') return null;
  const products =
    sketch === null
      ? succeed(null)
      : solver.sketch(work.points[sketch.at].point, sketch.directions, sketch.columns);
  if (!products.ok) return products;
  return succeed({ work: 'evaluate', problem, points, ownFit: own.value, sketch: products.value });
}

async function joint(work: JointWork, solver: LocalSolver, means: Means): Promise<Computed<WorkAnswer>> {
  const { problem, start, curvature, linear, l1, l2 } = work;
  const steps = solver.jointSteps(start, { curvature, linear }, l1, l2);
  let turn = steps.next();
  while (!turn.done) {
    if ((await means.breathe()) === 'stop') return null;
    turn = steps.next();
  }
  return turn.value.ok ? succeed({ work: 'joint', problem, ...turn.value.value }) : turn.value;
}

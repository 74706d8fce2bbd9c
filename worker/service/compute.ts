import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { EvaluateWork } from '../../protocol/messages/evaluate.js';
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
  /** Lets other events in between two problems; says `stop` when the run is over meanwhile. */
  readonly breathe: () => Promise<'go-on' | 'stop'>;
}

/** Answers of all work items in order, or the first failure. */
export async function computeWorks(
  works: readonly FilledWork[],
  means: Means,
): Promise<Checked<WorkAnswer[]>> {
  const answers: WorkAnswer[] = [];
  for (const work of works) {
    const answer = await computeWork(work, means);
    if (!answer.ok) return answer;
    answers.push(answer.value);
  }
  return succeed(answers);
}

async function computeWork(work: FilledWork, means: Means): Promise<Checked<WorkAnswer>> {
  if (work.work === 'survey')
    return succeed({ work: 'survey', ...surveyOf(means.raw, means.loss), allowance: means.allowance });
  const { solver } = means;
  if (solver === null) return fail('dimension-wrong', 'The scaling of the run is not known yet.');
  if (work.work === 'proximal') return proximal(work.problems, solver, means);
  if (work.work === 'evaluate') return evaluate(work, solver, means);
  const factor = solver.factor();
  return factor.ok ? succeed({ work: 'factor', factor: factor.value }) : factor;
}

async function proximal(
  asked: readonly FilledProblem[],
  solver: LocalSolver,
  means: Means,
): Promise<Checked<WorkAnswer>> {
  const problems = [];
  for (const { problem, center, scale, diagonal, start } of asked) {
    if ((await means.breathe()) === 'stop') return cancelled();
    const solved = solver.proximal(center, scale, diagonal, start);
    if (!solved.ok) return solved;
    problems.push({ problem, ...solved.value });
  }
  return succeed({ work: 'proximal', problems });
}

async function evaluate(work: EvaluateWork, solver: LocalSolver, means: Means): Promise<Checked<WorkAnswer>> {
  const points = [];
  for (const { point, want } of work.points) {
    if ((await means.breathe()) === 'stop') return cancelled();
    const evaluated = solver.evaluate(point, want);
    if (!evaluated.ok) return evaluated;
    points.push(evaluated.value);
  }
  const { problem, ownFit, sketch } = work;
  const own = ownFit === null ? succeed(null) : solver.ownFit(work.points[ownFit.at].point, ownFit.hold);
  if (!own.ok) return own;
  const products =
    sketch === null
      ? succeed(null)
      : solver.sketch(work.points[sketch.at].point, sketch.directions, sketch.columns);
  if (!products.ok) return products;
  return succeed({ work: 'evaluate', problem, points, ownFit: own.value, sketch: products.value });
}

const cancelled = () => fail('run-cancelled', 'The run ended while its ask was being answered.');

import { mergeFactors } from '../../numerics/triangular-factor.js';
import type { EvaluateAnswer } from '../../protocol/messages/evaluate.js';
import type { WorkAnswer } from '../../protocol/messages/round.js';
import type { MethodEnd } from '../consensus/method.js';
import { FactoredModel } from '../consensus/pooled-rung.js';
import { EvaluateGroups } from './evaluate-groups.js';
import type { Grounds } from './problems.js';
import { isStop, type Rounds } from './rounds.js';
import type { Batch, RunAsk } from './run.js';
import type { Solved } from './solve.js';
import type { PooledSurvey, Stop } from './survey.js';

/**
 * Mean unit deviance of every fold's held-out rows (outer) under every fit made without them (inner); NaN where that
 * fit did not end solved. Squared loss on the pooled rung has it in the folds' own triangular factors; otherwise one
 * ask brings the values.
 */
export function* heldOutLosses(
  grounds: Grounds,
  rounds: Rounds,
  solved: Solved,
): Generator<RunAsk, number[][] | Stop, Batch> {
  const { survey, frame } = grounds;
  const values =
    solved.first?.kind === 'factor'
      ? valuesFromFactors(solved, solved.first.factors, frame.p)
      : yield* valuesAsked(grounds, rounds, solved);
  if (isStop(values)) return values;
  return values.map((own, f) => {
    const { rowsUsed, response } = survey.folds[f].moments;
    return own.map((value) => (2 * (value * survey.rowsTotal - response.saturatedLoss)) / rowsUsed);
  });
}

/** The factors of all folds come site after site, in the order of the folds. */
function valuesFromFactors(solved: Solved, factors: readonly Float64Array[], p: number): number[][] {
  const count = solved.folds.length;
  return solved.folds.map(({ ends }, f) => {
    const own = factors.filter((_, at) => at % count === f);
    const model = new FactoredModel(mergeFactors(own, p + 1), p);
    return ends.map((end) => (end.outcome === 'solved' ? model.value(end.z) : Number.NaN));
  });
}

function* valuesAsked(
  { roster, survey }: Grounds,
  rounds: Rounds,
  solved: Solved,
): Generator<RunAsk, number[][] | Stop, Batch> {
  const groups = new EvaluateGroups();
  const sites = [...roster.keys()];
  const numberOf = (f: number, l: number): number => f * solved.lambdas.length + l;
  for (const [f, { ends }] of solved.folds.entries())
    for (const [l, end] of ends.entries()) {
      if (end.outcome !== 'solved') continue;
      const points = [{ point: end.z, want: 'value' as const }];
      const part = { fold: survey.folds[f].fold, side: 'held-out' as const };
      groups.add(numberOf(f, l), { part, sites }, { points, ownFit: null, sketch: null });
    }
  const works = sites.map((site) => groups.works(site));
  if (works[0].length === 0) return solved.folds.map(({ ends }) => ends.map(() => Number.NaN));
  const answers = yield* rounds.askOnce('choose', 'losses of the rows held out', works);
  if (isStop(answers)) return answers;
  const split = groups.split(answers.map((own) => own.filter(isEvaluate)));
  return solved.folds.map(({ ends }, f) =>
    ends.map((_: MethodEnd, l) => {
      const own = split.get(numberOf(f, l));
      return own === undefined ? Number.NaN : own.reduce((sum, site) => sum + site.points[0].value, 0);
    }),
  );
}

const isEvaluate = (answer: WorkAnswer): answer is EvaluateAnswer => answer.work === 'evaluate';

/** Held-out rows of every fold. */
export const foldRows = ({ folds }: PooledSurvey): { readonly fold: string; readonly rows: number }[] =>
  folds.map(({ fold, moments }) => ({ fold, rows: moments.rowsUsed }));

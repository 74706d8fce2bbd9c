import type { SurveyAnswer } from '../../protocol/messages/survey.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { foldProblem } from './fold-problem.js';
import { type Moments, mergeMoments, spreadOf } from './moments.js';
import { refusalsOf } from './refusals.js';
import { askAll, type Batch, type Member, memberName, type RunAsk, type Shown } from './run.js';

/** What all sites together bring: the pooled moments and sums, and who brings how many rows. */
export interface PooledSurvey {
  readonly rowsTotal: number;
  readonly sites: readonly {
    readonly site: string;
    readonly rowsUsed: number;
    readonly rowsDropped: number;
  }[];
  readonly columns: readonly string[];
  readonly mean: Float64Array;
  /** 1/N standard deviation. */
  readonly sd: Float64Array;
  readonly response: Moments['response'];
  /** Folds of the cross-validation with the moments of the rows in them; empty without one. */
  readonly folds: readonly { readonly fold: string; readonly moments: Moments }[];
  readonly answers: readonly SurveyAnswer[];
  /** How long each member took to answer. Milliseconds. */
  readonly agesMs: readonly number[];
  readonly notes: readonly string[];
}

/** Why a run cannot go on: an outcome with its reason, in words for the analyst. */
export interface Stop {
  readonly outcome: 'refused' | 'unbounded' | 'broken' | 'site-missing';
  readonly reason: string;
}

/** Stage one: asks every site what it would bring, and pools it in roster order. */
export function* survey(
  specification: FitSpecification,
  roster: readonly Member[],
  shown: Shown | null,
): Generator<RunAsk, PooledSurvey | Stop, Batch> {
  const { answers, agesMs } = yield* askAll({
    stage: 'survey',
    works: roster.map(() => [{ work: 'survey' as const }]),
    scaling: null,
    shown,
  });
  const refused = refusalsOf(answers, roster);
  if (refused !== null) return refused;
  const surveys = answers.map((answer) => {
    const [first] = answer as readonly SurveyAnswer[];
    return first;
  });
  const [{ columns }] = surveys;
  const odd = surveys.findIndex((answer) => !sameNames(answer.columns, columns));
  if (odd >= 0)
    return {
      outcome: 'refused',
      reason: `site ${memberName(roster[odd])} built other design columns than ${memberName(roster[0])}: do both run the same version?`,
    };
  // one list of the names stays, not one for each member
  const lean = surveys.map((answer) => ({ ...answer, columns }));
  const pooled = { ...pool(lean, roster), agesMs };
  return responseProblem(specification, pooled) ?? foldProblem(specification, pooled) ?? pooled;
}

const sameNames = (a: readonly string[], b: readonly string[]): boolean =>
  a.length === b.length && a.every((name, j) => name === b[j]);

function pool(surveys: readonly SurveyAnswer[], roster: readonly Member[]): Omit<PooledSurvey, 'agesMs'> {
  const whole = mergeMoments(surveys);
  return {
    rowsTotal: whole.rowsUsed,
    sites: surveys.map(({ rowsUsed, rowsDropped }, i) => ({
      site: memberName(roster[i]),
      rowsUsed,
      rowsDropped,
    })),
    columns: surveys[0].columns,
    mean: whole.mean,
    sd: spreadOf(whole),
    response: whole.response,
    folds: pooledFolds(surveys),
    answers: surveys,
    notes: surveys.flatMap((answer, i) => answer.notes.map((note) => `${memberName(roster[i])}: ${note}`)),
  };
}

/** The folds of all sites, in order of their labels. */
function pooledFolds(surveys: readonly SurveyAnswer[]): PooledSurvey['folds'] {
  const labels = [...new Set(surveys.flatMap(({ folds }) => folds.map(({ fold }) => fold)))].sort();
  return labels
    .map((fold) => ({
      fold,
      moments: mergeMoments(surveys.flatMap(({ folds }) => folds.filter((own) => own.fold === fold))),
    }))
    .filter(({ moments }) => moments.rowsUsed > 0);
}

/** Responses for which no fit with an intercept exists. */
function responseProblem({ loss, intercept }: FitSpecification, pooled: PooledSurvey): Stop | null {
  const { weightSum, weightedSum, least, most } = pooled.response;
  if (!(weightSum > 0))
    return {
      outcome: 'refused',
      reason: 'every weight is zero: there is nothing to fit. Check the weights column.',
    };
  if (loss.kind === 'logistic' && least === most && intercept === 'shared')
    return {
      outcome: 'unbounded',
      reason: `every response at every site is ${least}: a logistic fit has no optimum.`,
    };
  if (loss.kind === 'poisson' && weightedSum === 0 && intercept === 'shared')
    return {
      outcome: 'unbounded',
      reason: 'every count at every site is zero: a Poisson fit has no optimum.',
    };
  return null;
}

import type { SurveyAnswer } from '../../protocol/messages/survey.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
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
  readonly response: {
    readonly weightSum: number;
    readonly weightedSum: number;
    readonly exposureSum: number;
    readonly least: number;
    readonly most: number;
    readonly saturatedLoss: number;
  };
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
  const names = JSON.stringify(surveys[0].columns);
  const odd = surveys.findIndex((answer) => JSON.stringify(answer.columns) !== names);
  if (odd >= 0)
    return {
      outcome: 'refused',
      reason: `site ${memberName(roster[odd])} built other design columns than ${memberName(roster[0])}: do both run the same version?`,
    };
  const pooled = { ...pool(surveys, roster), agesMs };
  return responseProblem(specification, pooled) ?? pooled;
}

/** Means and centred squares merged pairwise (Chan, Golub, LeVeque 1983), in roster order. */
function pool(surveys: readonly SurveyAnswer[], roster: readonly Member[]): Omit<PooledSurvey, 'agesMs'> {
  const [first] = surveys;
  const mean = Float64Array.from(first.mean);
  const squares = Float64Array.from(first.centredSquares);
  let rows = first.rowsUsed;
  for (const next of surveys.slice(1)) {
    const total = rows + next.rowsUsed;
    for (let j = 0; j < mean.length; j++) {
      const apart = next.mean[j] - mean[j];
      mean[j] += (apart * next.rowsUsed) / total;
      squares[j] += next.centredSquares[j] + (apart * apart * rows * next.rowsUsed) / total;
    }
    rows = total;
  }
  const sum = (of: (answer: SurveyAnswer) => number): number =>
    surveys.reduce((s, answer) => s + of(answer), 0);
  return {
    rowsTotal: rows,
    sites: surveys.map(({ rowsUsed, rowsDropped }, i) => ({
      site: memberName(roster[i]),
      rowsUsed,
      rowsDropped,
    })),
    columns: first.columns,
    mean,
    sd: squares.map((square) => Math.sqrt(square / rows)),
    response: {
      weightSum: sum((answer) => answer.response.weightSum),
      weightedSum: sum((answer) => answer.response.weightedSum),
      exposureSum: sum((answer) => answer.response.exposureSum),
      least: Math.min(...surveys.map((answer) => answer.response.least)),
      most: Math.max(...surveys.map((answer) => answer.response.most)),
      saturatedLoss: sum((answer) => answer.response.saturatedLoss),
    },
    answers: surveys,
    notes: surveys.flatMap((answer, i) => answer.notes.map((note) => `${memberName(roster[i])}: ${note}`)),
  };
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

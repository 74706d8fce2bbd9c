import { leastOf, oneStandardErrorOf, pooledFolds } from './cross-validation.js';
import { foldRows, heldOutLosses } from './held-out.js';
import { criterionValue } from './information-criteria.js';
import type { Grounds } from './problems.js';
import type { ChoiceDocument } from './result-parts.js';
import { isStop, type Rounds } from './rounds.js';
import type { Batch, RunAsk } from './run.js';
import type { Solved } from './solve.js';
import type { Stop } from './survey.js';

/** Which fit the run stands by: the only one, the one chosen, or none of several. */
export interface Chosen {
  readonly fit: number | null;
  readonly document: ChoiceDocument | null;
  readonly notes: readonly string[];
}

/** Stage four: the choice of λ, by cross-validation or by a criterion of the fits themselves. */
export function* choose(
  grounds: Grounds,
  rounds: Rounds,
  solved: Solved,
): Generator<RunAsk, Chosen | Stop, Batch> {
  const rule = grounds.specification.choose;
  if (rule === null) return { fit: solved.ends.length === 1 ? 0 : null, document: null, notes: [] };
  // of several penalties, those with one λ are the same in every fit
  const at = grounds.specification.penalties.findIndex(
    ({ path, lambda }) => path !== null || lambda.length > 1,
  );
  const lambdas = solved.lambdas.map((own) => own[Math.max(at, 0)]);
  const nonzero = solved.ends.map(({ z }) => slopesOf(grounds, z).filter((value) => value !== 0).length);
  if (rule.kind === 'criterion') {
    const criterion = solved.ends.map((end, fit) =>
      end.outcome === 'solved' ? criterionOf(grounds, end.loss, nonzero[fit], rule.criterion) : Number.NaN,
    );
    const minimum = leastOf(criterion, lambdas);
    if (minimum === null) return nothingChosen;
    const base = { rule: rule.criterion, lambdas, nonzero, crossValidation: null };
    return {
      fit: minimum,
      document: { ...base, chosen: minimum, minimum, criterion: criterion.map(orNull) },
      notes: [],
    };
  }
  const losses = yield* heldOutLosses(grounds, rounds, solved);
  if (isStop(losses)) return losses;
  const folds = pooledFolds(foldRows(grounds.survey), losses);
  const usable = folds.mean.map((mean, fit) => (solved.ends[fit].outcome === 'solved' ? mean : Number.NaN));
  const minimum = leastOf(usable, lambdas);
  if (minimum === null) return nothingChosen;
  const fit =
    rule.rule === 'minimum' ? minimum : oneStandardErrorOf({ ...folds, mean: usable }, lambdas, minimum);
  const crossValidation = {
    folds: folds.folds,
    foldLoss: folds.foldLoss.map((own) => own.map(orNull)),
    mean: folds.mean.map(orNull),
    standardError: folds.standardError.map(orNull),
  };
  const document = {
    rule: rule.rule,
    chosen: fit,
    minimum,
    lambdas,
    nonzero,
    crossValidation,
    criterion: null,
  };
  const left = usable.filter((mean) => Number.isNaN(mean)).length;
  const notes =
    left === 0
      ? []
      : [`${left} of ${lambdas.length} λ were left out of the choice: a fold or the fit did not solve`];
  return { fit, document, notes };
}

const nothingChosen: Chosen = {
  fit: null,
  document: null,
  notes: ['nothing was chosen: no λ solved on all rows and in every fold'],
};

const orNull = (value: number): number | null => (Number.isNaN(value) ? null : value);

const slopesOf = ({ frame }: Grounds, z: Float64Array): number[] => [...z.slice(frame.intercept ? 1 : 0)];

function criterionOf(
  { specification, survey, frame }: Grounds,
  loss: number,
  nonzero: number,
  criterion: 'aic' | 'bic' | 'extended-bic',
): number {
  return criterionValue(criterion, specification.loss.kind, {
    deviance: 2 * (loss * survey.rowsTotal - survey.response.saturatedLoss),
    rows: survey.rowsTotal,
    degreesOfFreedom: nonzero + (frame.intercept ? 1 : 0),
    slopes: nonzero,
    columns: frame.kept.length,
  });
}
